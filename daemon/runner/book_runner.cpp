#include "daemon/runner/book_runner.h"

#include <utility>

#include "daemon/night/record.h"
#include "daemon/night/snapshot.h"
#include "daemon/settings/settings.h"

namespace nightweigh::runner {

namespace {

constexpr const char* settings_kind = "settings";

// Whether the journal's newest `settings` entry says something else than the settings; an Error where a book
// with nights cannot take the change.
Result<bool> settings_differ(const BookSettings& settings, store::Store& store, bool has_nights) {
  Result<std::optional<store::JournalEntry>> newest = store.newest(settings.name, settings_kind);
  if (!newest) return failure(newest.error());
  if (!*newest) return true;
  if ((*newest)->bytes == settings.resolved_text) return false;
  const std::string key =
      has_nights ? settings::fixed_key_that_differs((*newest)->bytes, settings.resolved_text) : "";
  if (key.empty()) return true;
  return failure({ErrorKind::bad_settings, "book " + settings.name + ", key " + key,
                  "cannot change after the book's first night", "",
                  "set it back, or start a new book under another name"});
}

}  // namespace

BookRunner::BookRunner(std::shared_ptr<const BookSettings> settings)
    : settings_(std::move(settings)), state_(night::initial_state(*settings_)) {
  for (const Instrument& instrument : settings_->instruments) instruments_.push_back(instrument.id);
}

Result<std::unique_ptr<BookRunner>> BookRunner::open(std::shared_ptr<const BookSettings> settings,
                                                     store::Store& store) {
  std::unique_ptr<BookRunner> book(new BookRunner(std::move(settings)));
  const std::string& name = book->settings_->name;
  Result<std::optional<store::Snapshot>> snapshot = store.snapshot(name);
  if (!snapshot) return failure(snapshot.error());
  Result<bool> differ = settings_differ(*book->settings_, store, snapshot->has_value());
  if (!differ) return failure(differ.error());
  book->settings_are_new_ = *differ;
  Result<store::JournalHead> head = store.head(name);
  if (!head) return failure(head.error());
  book->head_ = *head;
  if (!*snapshot) return book;

  Result<night::LoadedState> loaded = night::load_snapshot(
      {(*snapshot)->desk, (*snapshot)->strategy, (*snapshot)->covariation}, *book->settings_);
  if (!loaded) return failure(loaded.error());
  book->state_ = std::move(loaded->state);
  book->rebuild_because_ = std::move(loaded->rebuild_because);
  Result<std::optional<store::StoredNight>> last = store.night(name, (*snapshot)->date);
  if (!last) return failure(last.error());
  if (!*last) {
    return failure({ErrorKind::corrupted, "book " + name,
                    "has a state of " + (*snapshot)->date.to_string() + " but no such night", "",
                    "restore the database from a backup"});
  }
  book->night_bytes_ = std::move((*last)->bytes);
  return book;
}

Result<void> BookRunner::enter_settings(store::Store& store) {
  if (!settings_are_new_) return {};
  Result<store::JournalHead> head = store.append(settings_->name, settings_kind, settings_->resolved_text);
  if (!head) return failure(head.error());
  head_ = *head;
  settings_are_new_ = false;
  return {};
}

// Closes of a date that is no trading day of this book belong to another book that holds the instrument.
Result<std::optional<Date>> BookRunner::next_trading_day_with_closes(store::Store& store,
                                                                     std::optional<Date> after) const {
  for (;;) {
    Result<std::optional<Date>> date =
        store.next_date_with_closes(instruments_, after, settings_->start.date);
    if (!date || !*date || settings_->calendar.is_trading_day(**date)) return date;
    after = **date;
  }
}

Result<BookRunner::Ready> BookRunner::ready_days(store::Store& store, std::size_t most) const {
  Ready ready;
  std::optional<Date> after = state_.last_night;
  while (ready.days.size() < most) {
    const Date earliest = after ? after->plus_days(1) : settings_->start.date;
    Result<std::optional<Date>> with_closes = next_trading_day_with_closes(store, after);
    if (!with_closes) return failure(with_closes.error());
    if (!*with_closes) return ready;  // nothing there: no wait worth a word
    const Date date = settings_->calendar.at_or_after(earliest).value_or(**with_closes);
    Result<std::vector<std::optional<Close>>> closes = store.day(instruments_, date);
    if (!closes) return failure(closes.error());
    std::vector<std::string> missing;
    for (std::size_t line = 0; line < instruments_.size(); ++line) {
      if (!(*closes)[line]) missing.push_back(instruments_[line]);
    }
    if (!missing.empty()) {
      if (missing.size() == instruments_.size()) {
        ready.waiting.push_back(
            date.to_string() + ": no close of any instrument yet, though closes of " +
            (*with_closes)->to_string() +
            " are here; deliver them, or list the date as no trading day in the calendar file");
      } else {
        for (const std::string& instrument : missing) {
          ready.waiting.push_back(date.to_string() + ": no close of " + instrument + " yet");
        }
      }
      return ready;
    }
    ready.days.push_back({date, std::move(*closes)});
    after = date;
  }
  return ready;
}

BookRunner::Computed BookRunner::compute(const std::vector<night::ClosesOfTheDay>& days,
                                         const night::History* history) const {
  Computed computed;
  night::BookState state = state_;
  for (const night::ClosesOfTheDay& day : days) {
    night::Answer answer = night::process_night(state, day, {}, *settings_, history);
    if (night::Night* night = std::get_if<night::Night>(&answer)) {
      state = night->after;
      computed.nights.push_back(std::move(*night));
      continue;
    }
    if (night::Waiting* waiting = std::get_if<night::Waiting>(&answer))
      computed.waiting = std::move(waiting->reasons);
    computed.needs_history = std::holds_alternative<night::NeedsHistory>(answer);
    break;
  }
  return computed;
}

Result<night::History> BookRunner::history(store::Store& store) const {
  night::History history;
  std::uint64_t sequence = 0;
  bool first = true;
  for (;;) {
    constexpr std::size_t page = 500;
    Result<std::vector<store::JournalEntry>> entries = store.entries_after(settings_->name, sequence, page);
    if (!entries) return failure(entries.error());
    for (const store::JournalEntry& entry : *entries) {
      sequence = entry.sequence;
      if (entry.kind != store::night_kind) continue;
      std::optional<night::HistoryDay> day = night::history_day(entry.bytes);
      if (!day || day->relatives.size() != settings_->line_count()) {
        return failure({ErrorKind::corrupted,
                        "book " + settings_->name + ", journal entry " + std::to_string(sequence),
                        "is no night of these instruments", "", "restore the database from a backup"});
      }
      if (!std::exchange(first, false)) history.push_back(std::move(*day));
    }
    if (entries->size() < page) return history;
  }
}

store::NightToStore BookRunner::to_store(const night::Night& night) const {
  night::SnapshotBytes bytes = night::save_snapshot(night.after, *settings_);
  return {settings_->name,
          night.date,
          std::string(night::name_of(night.evidence.verdict)),
          night.bytes,
          {night.date, std::move(bytes.desk), std::move(bytes.strategy), std::move(bytes.covariation)},
          instruments_};
}

void BookRunner::advance(const night::Night& last, const store::JournalHead& head) {
  state_ = last.after;
  night_bytes_ = last.bytes;
  head_ = head;
  rebuild_because_.clear();
}

BookViewPointer BookRunner::view() const {
  auto view = std::make_shared<BookView>();
  view->settings = settings_;
  view->nights = state_.nights;
  view->last_night = state_.last_night;
  view->next_night = night::next_date(state_, *settings_);
  view->night_bytes = night_bytes_;
  view->head_hash = head_.hash;
  view->head_sequence = head_.sequence;
  view->waiting = waiting_;
  view->trouble = trouble_;
  return view;
}

}  // namespace nightweigh::runner

#include "daemon/runner/runner.h"

#include <spdlog/spdlog.h>

#include <algorithm>
#include <boost/asio/post.hpp>
#include <latch>
#include <optional>
#include <utility>

#include "daemon/runner/admission.h"

namespace nightweigh::runner {

namespace {

// Nights of one book that may share a transaction, and be lost together when the power fails: they are
// computed again from the stored closes.
constexpr std::size_t nights_a_round = 32;

feed::RowError storage_error(const Error& error) {
  return {error.kind, 0, "", error.value, error.place + ": " + error.problem, error.remedy};
}

}  // namespace

Runner::Runner(RunnerParts parts) : parts_(std::move(parts)), pool_(std::max(1U, parts_.threads)) {}

Result<std::unique_ptr<Runner>> Runner::open(const std::vector<BookSettings>& books, RunnerParts parts) {
  std::unique_ptr<Runner> runner(new Runner(std::move(parts)));
  for (const BookSettings& settings : books) {
    Result<std::unique_ptr<BookRunner>> book =
        BookRunner::open(std::make_shared<const BookSettings>(settings), runner->parts_.store);
    if (!book) return failure(book.error());
    if (!(*book)->rebuild_because().empty()) {
      runner->parts_.log.warn("book={} the strategy will be rebuilt from history: {}", settings.name,
                              (*book)->rebuild_because());
    }
    runner->books_.push_back(std::move(*book));
  }
  for (const std::unique_ptr<BookRunner>& book : runner->books_) {
    if (Result<void> entered = book->enter_settings(runner->parts_.store); !entered) {
      return failure(entered.error());
    }
    for (const std::string& instrument : book->instruments()) {
      runner->by_instrument_[instrument].push_back(book.get());
    }
    runner->publish(*book);
  }
  return runner;
}

std::vector<BookRunner*> Runner::holders_of(const feed::ParsedBatch& batch) const {
  std::vector<BookRunner*> out;
  for (const std::unique_ptr<BookRunner>& book : books_) {
    const bool holds =
        std::any_of(batch.rows.begin(), batch.rows.end(), [&](const feed::ParsedBatch::Row& row) {
          const auto holders = by_instrument_.find(row.close.instrument);
          return holders != by_instrument_.end() && std::find(holders->second.begin(), holders->second.end(),
                                                              book.get()) != holders->second.end();
        });
    if (holds) out.push_back(book.get());
  }
  return out;
}

feed::Acknowledgement Runner::take(const std::string& bytes, bool is_json, const std::string& source) {
  feed::ParsedBatch batch =
      is_json ? feed::parse_json(bytes, parts_.limits) : feed::parse_csv(bytes, parts_.limits);
  const auto refused = [&](std::vector<feed::RowError> errors) {
    parts_.log.warn("batch={} from {} refused: {}", batch.digest.substr(0, 12), source,
                    errors.front().message());
    return feed::refusal(batch.digest, std::move(errors));
  };
  if (!batch.ok()) return refused(std::move(batch.errors));

  feed::Acknowledgement answer;
  answer.digest = batch.digest;
  answer.status = feed::Acknowledgement::Status::known;
  Result<bool> known = parts_.store.knows_batch(batch.digest);
  if (!known) return refused({storage_error(known.error())});
  if (!*known) {
    std::map<std::string, Date> today;
    for (const std::unique_ptr<BookRunner>& book : books_) {
      today[book->settings().name] = platform::date_in_zone(parts_.clock.now(), book->settings().time_zone);
    }
    Result<Admission> admission =
        admit(batch, by_instrument_, today, parts_.store, parts_.limits.errors_max, &stop_);
    if (!admission) return refused({storage_error(admission.error())});
    if (!admission->errors.empty()) return refused(std::move(admission->errors));
    if (!admission->fresh.empty()) {
      answer.rows = admission->fresh.size();
      answer.status = feed::Acknowledgement::Status::taken;
      Result<void> stored = parts_.store.store_batch(
          {batch.digest, source, parts_.clock.now().time_since_epoch().count(), std::move(admission->fresh)});
      if (!stored) return refused({storage_error(stored.error())});
    }
  }
  parts_.log.info("batch={} from {} {}: {} new rows", batch.digest.substr(0, 12), source,
                  feed::name_of(answer.status), answer.rows);
  answer.books = advance(holders_of(batch));
  return answer;
}

void Runner::catch_up() {
  std::vector<BookRunner*> all;
  for (const std::unique_ptr<BookRunner>& book : books_) all.push_back(book.get());
  advance(all);
}

bool Runner::in_trouble() const {
  return std::any_of(books_.begin(), books_.end(), [](const auto& book) { return !book->trouble().empty(); });
}

std::vector<feed::BookAnswer> Runner::advance(const std::vector<BookRunner*>& books) {
  Answers answers;
  for (BookRunner* book : books) answers[book->settings().name].book = book->settings().name;
  std::vector<BookRunner*> active = books;
  while (!active.empty() && !stop_) {
    if (!advance_round(active, answers)) break;
  }
  std::vector<feed::BookAnswer> out;
  for (BookRunner* book : books) {
    feed::BookAnswer& answer = answers[book->settings().name];
    answer.waiting = answer.dates.empty();
    if (answer.waiting && answer.reasons.empty()) {
      const std::optional<Date> next = night::next_date(book->state(), book->settings());
      answer.reasons.push_back(stop_  ? "the service is stopping; it goes on at its next start"
                               : next ? "nothing new: the next night is " + next->to_string()
                                      : "nothing new: the next night is the next date with closes");
    }
    out.push_back(std::move(answer));
  }
  return out;
}

// One book's share of a round.
struct Runner::Work {
  BookRunner* book;
  BookRunner::Ready ready;
  std::optional<night::History> history = std::nullopt;
  BookRunner::Computed computed = {};
  std::string fault = {};  // what an assertion of ours said
};

void Runner::report_trouble(BookRunner& book, const std::string& message, Answers& answers) {
  book.set_trouble(message);
  answers[book.settings().name].reasons = {message};
  parts_.log.error("book={} {}", book.settings().name, message);
  publish(book);
}

// Computes side by side what needs it, and only touches each book's own Work.
void Runner::compute(std::vector<Work>& works, bool with_history) {
  std::vector<Work*> chosen;
  for (Work& work : works) {
    if (work.history.has_value() == with_history) chosen.push_back(&work);
  }
  std::latch done(static_cast<std::ptrdiff_t>(chosen.size()));
  for (Work* work : chosen) {
    boost::asio::post(pool_, [work, &done] {
      try {
        work->computed = work->book->compute(work->ready.days, work->history ? &*work->history : nullptr);
      } catch (const std::exception& exception) {
        work->fault = exception.what();
      }
      done.count_down();
    });
  }
  done.wait();
}

// One round: some complete days of each active book, computed side by side, committed together. Books with
// nothing more to do leave `active`. False: storage failed, no sense in going on now.
bool Runner::advance_round(std::vector<BookRunner*>& active, Answers& answers) {
  std::vector<Work> works;
  for (BookRunner* book : active) {
    Result<BookRunner::Ready> ready = book->ready_days(parts_.store, nights_a_round);
    if (!ready) {
      report_trouble(*book, ready.error().message(), answers);
      return false;
    }
    if (ready->days.empty()) {
      answers[book->settings().name].reasons = ready->waiting;
      book->set_waiting(std::move(ready->waiting));
      book->set_trouble("");
      publish(*book);
      continue;
    }
    works.push_back({book, std::move(*ready)});
  }

  compute(works, false);
  for (Work& work : works) {
    if (!work.computed.needs_history) continue;
    Result<night::History> history = work.book->history(parts_.store);
    if (!history) {
      report_trouble(*work.book, history.error().message(), answers);
      return false;
    }
    parts_.log.info("book={} rebuilding the strategy from {} nights", work.book->settings().name,
                    history->size());
    work.history = std::move(*history);
  }
  compute(works, true);

  std::vector<store::NightToStore> nights;
  for (const Work& work : works) {
    for (const night::Night& night : work.computed.nights) nights.push_back(work.book->to_store(night));
  }
  Result<std::vector<store::JournalHead>> heads = parts_.store.store_nights(nights);
  if (!heads) {
    for (const Work& work : works) report_trouble(*work.book, heads.error().message(), answers);
    return false;
  }

  active.clear();
  std::size_t committed = 0;
  for (Work& work : works) {
    committed += work.computed.nights.size();
    if (!work.computed.nights.empty()) {
      work.book->advance(work.computed.nights.back(), (*heads)[committed - 1]);
      for (const night::Night& night : work.computed.nights) {
        answers[work.book->settings().name].dates.push_back(night.date);
      }
      log_nights(*work.book, work.computed.nights);
    }
    if (!work.fault.empty()) {
      report_trouble(*work.book,
                     "the night cannot be computed, which is a fault of the program: " + work.fault, answers);
      continue;
    }
    if (work.computed.waiting.empty()) active.push_back(work.book);
    answers[work.book->settings().name].reasons = work.computed.waiting;
    work.book->set_waiting(std::move(work.computed.waiting));
    work.book->set_trouble("");
    publish(*work.book);
  }
  return true;
}

void Runner::log_nights(const BookRunner& book, const std::vector<night::Night>& nights) {
  for (const night::Night& night : nights) {
    parts_.log.info("book={} date={} verdict={} {}", book.settings().name, night.date.to_string(),
                    night::name_of(night.evidence.verdict), night.evidence.reason);
  }
}

}  // namespace nightweigh::runner

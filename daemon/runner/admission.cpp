#include "daemon/runner/admission.h"

#include <algorithm>
#include <optional>

namespace nightweigh::runner {

namespace {

// A batch of a million rows takes many seconds to look at: it is left when the service is to stop. One that
// is looked at in a moment is finished.
constexpr std::size_t rows_between_looks = 4096;

using Books = std::vector<const BookRunner*>;

bool is_processed(const BookRunner& book, Date date) {
  return book.state().last_night && date <= *book.state().last_night && date >= book.settings().start.date &&
         book.settings().calendar.is_trading_day(date);
}

bool can_become_a_night(const BookRunner& book, Date date) {
  return date >= book.settings().start.date && book.settings().calendar.is_trading_day(date) &&
         !(book.state().last_night && date <= *book.state().last_night);
}

bool same_values(const Close& a, const Close& b) {
  return a.close == b.close && a.dividend == b.dividend && a.split == b.split;
}

std::string values_of(const Close& close) {
  std::string text = close.close.to_string();
  if (close.dividend) text += ", dividend " + close.dividend->to_string();
  if (close.split) text += ", split " + close.split->to_string();
  return text + ", revision " + std::to_string(close.revision);
}

// Why the date of a row cannot be used at all, or nullopt.
std::optional<feed::RowError> date_problem(const feed::ParsedBatch::Row& row, const Books& books,
                                           const std::map<std::string, Date>& today) {
  const Date date = row.close.date;
  const auto error = [&](std::string problem, std::string remedy) {
    return feed::RowError{ErrorKind::bad_input, row.row,          "date", date.to_string(),
                          std::move(problem),   std::move(remedy)};
  };
  const auto all = [&](auto&& predicate) { return std::all_of(books.begin(), books.end(), predicate); };
  if (all([&](const BookRunner* book) { return date > today.at(book->settings().name); })) {
    return error("lies in the future by the time zone of every book that holds " + row.close.instrument,
                 "deliver a close after its day; look at the clock of the data job and of this machine");
  }
  if (all([&](const BookRunner* book) { return date < book->settings().start.date; })) {
    return error("lies before the start of every book that holds " + row.close.instrument,
                 "leave earlier rows out");
  }
  if (all([&](const BookRunner* book) { return !book->settings().calendar.is_trading_day(date); })) {
    return error("is no trading day of any book that holds " + row.close.instrument,
                 "leave the row out, or change the book's calendar");
  }
  return std::nullopt;
}

}  // namespace

Result<Admission> admit(const feed::ParsedBatch& batch, const std::map<std::string, Books>& books,
                        const std::map<std::string, Date>& today, store::Store& store, std::size_t errors_max,
                        const std::atomic<bool>* stop) {
  Admission admission;
  std::size_t looked_at = 0;
  for (const feed::ParsedBatch::Row& row : batch.rows) {
    if (++looked_at % rows_between_looks == 0 && stop != nullptr && *stop) {
      return failure({ErrorKind::busy, "the service", "is stopping and did not take the batch", "",
                      "send it again when it runs; a file in the drop folder stays there for that"});
    }
    if (admission.errors.size() >= errors_max) {
      admission.errors.push_back({ErrorKind::limit, 0, "", "", "has more mistakes than are listed",
                                  "mend these and send the batch again"});
      break;
    }
    const Close& close = row.close;
    const auto holders = books.find(close.instrument);
    if (holders == books.end()) {
      admission.errors.push_back({ErrorKind::bad_input, row.row, "instrument", close.instrument,
                                  "is held by no book",
                                  "look for a typing mistake, or add it to the settings"});
      continue;
    }
    Result<std::vector<store::StoredClose>> stored = store.closes_of(close.instrument, close.date);
    if (!stored) return failure(stored.error());
    const auto same_revision =
        std::find_if(stored->begin(), stored->end(),
                     [&](const store::StoredClose& known) { return known.close.revision == close.revision; });
    if (same_revision != stored->end() && same_values(same_revision->close, close)) continue;  // known
    if (std::optional<feed::RowError> problem = date_problem(row, holders->second, today)) {
      admission.errors.push_back(std::move(*problem));
      continue;
    }
    if (same_revision != stored->end()) {
      admission.errors.push_back({ErrorKind::conflict, row.row, "close", values_of(close),
                                  "differs from the stored close of " + close.instrument + " on " +
                                      close.date.to_string() + ", which is " +
                                      values_of(same_revision->close),
                                  "give a correction a higher revision"});
      continue;
    }
    const auto processed =
        std::find_if(holders->second.begin(), holders->second.end(),
                     [&](const BookRunner* book) { return is_processed(*book, close.date); });
    const bool useful =
        std::any_of(holders->second.begin(), holders->second.end(),
                    [&](const BookRunner* book) { return can_become_a_night(*book, close.date); });
    const bool corrects = !stored->empty() && close.revision > stored->back().close.revision;
    if (processed != holders->second.end() && corrects && same_values(stored->back().close, close)) {
      continue;  // a higher revision that says the same again of a night that is done
    }
    if (processed != holders->second.end() && (corrects || (stored->empty() && !useful))) {
      const std::string& name = (*processed)->settings().name;
      if (stored->empty()) {
        admission.errors.push_back(
            {ErrorKind::bad_input, row.row, "date", close.date.to_string(),
             "lies before the last night of book " + name + " and was none of its nights",
             "leave the row out"});
      } else {
        admission.errors.push_back({ErrorKind::not_built, row.row, "revision", std::to_string(close.revision),
                                    "would correct the night of " + close.date.to_string() + " of book " +
                                        name +
                                        ", which is processed; this version does not take such corrections",
                                    "keep the row for a version that does, and leave it out now"});
      }
      continue;
    }
    admission.fresh.push_back(close);
  }
  return admission;
}

}  // namespace nightweigh::runner

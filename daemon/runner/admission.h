// Whether a parsed batch may be stored: every row against the settings, the calendars, the clock and what
// is known already. Whole batch or nothing; every mistake is reported, not only the first.
#pragma once

#include <atomic>
#include <map>
#include <string>
#include <vector>

#include "daemon/feed/batch.h"
#include "daemon/runner/book_runner.h"

namespace nightweigh::runner {

struct Admission {
  std::vector<Close> fresh;            // rows that are not stored yet
  std::vector<feed::RowError> errors;  // not empty: refused
};

// `books` by instrument: those that hold it. `today` by book name: the date in its time zone now.
// A row that is stored already with the same values is neither fresh nor an error. Fails only where the
// store fails, or with kind busy where a batch of many thousand rows is still being looked at when `stop` is
// true.
Result<Admission> admit(const feed::ParsedBatch& batch,
                        const std::map<std::string, std::vector<const BookRunner*>>& books,
                        const std::map<std::string, Date>& today, store::Store& store, std::size_t errors_max,
                        const std::atomic<bool>* stop = nullptr);

}  // namespace nightweigh::runner

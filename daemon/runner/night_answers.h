// Past nights as JSON: one night's whole evidence, and the trade log.
#pragma once

#include <nlohmann/json_fwd.hpp>
#include <string>

#include "daemon/domain/date.h"
#include "daemon/domain/result.h"
#include "daemon/runner/book_view.h"
#include "daemon/store/store.h"

namespace nightweigh::runner {

// The recorded evidence with what is joined when read: hash, sequence, batches, the sheet's state.
Result<std::string> night_json(const store::StoredNight& night, const BookView& view);

struct LogPage {
  std::string body;                 // {"book":..,"rows":[..],"next":cursor or null}
  std::optional<std::string> next;  // cursor of the next page
};
// Newest first. filter.limit rows at most.
Result<LogPage> log_page(store::Store& store, const store::LogFilter& filter, const BookView& view);

}  // namespace nightweigh::runner

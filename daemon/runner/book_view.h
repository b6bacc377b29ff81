// What the service shows of a book: an immutable picture, replaced as a whole when something happened.
#pragma once

#include <cstdint>
#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "daemon/domain/book_settings.h"
#include "daemon/domain/date.h"

namespace nightweigh::runner {

struct BookView {
  std::shared_ptr<const BookSettings> settings;
  std::uint64_t nights = 0;
  std::optional<Date> last_night;
  std::optional<Date> next_night;  // where the calendar alone decides it
  std::string night_bytes;         // canonical JSON of the last night; empty before the first
  std::string head_hash;           // of the journal
  std::uint64_t head_sequence = 0;
  std::vector<std::string> waiting;  // why the next night does not come though closes are there
  std::string trouble;               // a failure of storage that is being retried; empty if none
};

using BookViewPointer = std::shared_ptr<const BookView>;

}  // namespace nightweigh::runner

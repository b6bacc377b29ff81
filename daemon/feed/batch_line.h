// A file of closes as one line for the feed socket.
#pragma once

#include <string>
#include <string_view>
#include <vector>

#include "daemon/feed/batch.h"

namespace nightweigh::feed {

struct BatchLine {
  std::string line;              // without a newline; empty where there are errors
  std::size_t rows = 0;          // distinct rows in it
  std::vector<RowError> errors;  // by row and column of the file: nothing should be sent
  bool ok() const { return errors.empty(); }
};

// CSV becomes {"closes":[{"date":..},..]} with every value as the string that stands in the file ("61.20"
// stays "61.20"), empty optional fields left out. The whole file is checked first as parse_csv does. A line
// that would be longer than limits.line_bytes_max is an error that points to the drop folder.
BatchLine csv_to_line(std::string_view bytes, const Limits& limits);

// JSON stays as it is, but for its line breaks, which become spaces (JSON has none inside strings).
BatchLine json_to_line(std::string_view bytes, const Limits& limits);

}  // namespace nightweigh::feed

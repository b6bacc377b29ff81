// A delivery of closes, parsed: one parser for the file drop and the socket, the same words for the same
// mistake. Parsing knows the format only; what is known already and which dates are trading days is
// asked in the runner.
#pragma once

#include <string>
#include <string_view>
#include <vector>

#include "daemon/domain/close.h"
#include "daemon/domain/result.h"

namespace nightweigh::feed {

struct Limits {
  std::size_t bytes_max = 64u << 20;
  std::size_t rows_max = 1'000'000;
  std::size_t line_bytes_max = 8u << 20;  // one line on the socket
  int json_depth_max = 32;
  std::size_t errors_max = 100;  // reporting stops there and says so
};

// One mistake in a batch. row counts data rows from 1 (0: the batch as a whole); column may be empty.
struct RowError {
  ErrorKind kind = ErrorKind::bad_input;
  std::size_t row = 0;
  std::string column;
  std::string value;
  std::string problem;
  std::string remedy;
  std::string message() const;  // "row 3, column close: is not a decimal number: \"12,5\". Write ..."
};

struct ParsedBatch {
  std::string digest;  // SHA-256 of the bytes
  struct Row {
    std::size_t row;  // as in RowError
    Close close;
  };
  std::vector<Row> rows;         // exact repetitions within the batch are dropped
  std::vector<RowError> errors;  // not empty: the batch is refused whole
  bool ok() const { return errors.empty(); }
};

// CSV: RFC 4180, UTF-8 (a byte order mark is allowed), header row, columns in any order:
// date,instrument,close[,revision][,dividend][,split]. Columns of later versions (volume, pay_date,
// relative, currency) are refused by name.
ParsedBatch parse_csv(std::string_view bytes, const Limits& limits);

// One JSON object {"closes":[{"date":..,"instrument":..,"close":..}, ...]}; the same columns as keys;
// numbers as strings or as JSON numbers, read from their text. Duplicate keys and depth are refused.
ParsedBatch parse_json(std::string_view bytes, const Limits& limits);

}  // namespace nightweigh::feed

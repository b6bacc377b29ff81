// What both parsers share: the columns, the checks of one row's values, repetitions, and the limits on
// rows and on reported mistakes. The same words for the same mistake come from here.
#pragma once

#include <array>
#include <cstddef>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "daemon/feed/batch.h"

namespace nightweigh::feed {

enum class Column : unsigned char { date, instrument, close, revision, dividend, split };
inline constexpr std::size_t column_count = 6;

std::string_view column_name(Column column);
std::optional<Column> column_named(std::string_view name);

// The mistake of a column or key that is none of the six: one of a later version (ErrorKind::not_built)
// or an unknown one.
RowError column_refused(std::size_t row, std::string_view name);

// date, instrument and close must stand in every row.
inline bool is_required(Column column) {
  return column <= Column::close;
}

struct Cell {
  // faulty: present, but its mistake is reported already; the value is not looked at.
  enum class State : unsigned char { absent, present, faulty } state = State::absent;
  std::string_view text;
};
using Cells = std::array<Cell, column_count>;

class RowCollector {
 public:
  explicit RowCollector(const Limits& limits) : limits_(limits) {}

  // Checks the values of data row `row` and keeps them, or reports every mistake in them.
  void add(std::size_t row, const Cells& cells);
  void report(RowError error);
  // Nothing more needs to be read: a limit was passed.
  bool stopped() const { return stopped_; }
  // Reports and ends the reading: what follows cannot be understood.
  void report_and_stop(RowError error);

  // Finds repetitions and contradictions, O(rows log rows), and hands everything over.
  ParsedBatch finish(std::string digest);

 private:
  std::optional<Decimal> read_number(std::size_t row, Column column, std::string_view text);
  void compare_repeated();

  const Limits& limits_;
  std::vector<ParsedBatch::Row> rows_;
  std::vector<RowError> errors_;
  bool stopped_ = false;
  bool more_mistakes_ = false;
};

}  // namespace nightweigh::feed

// parse_csv: the header, the count of fields, and the way from records to checked rows.
#include <utility>

#include "daemon/feed/batch.h"
#include "daemon/feed/csv_reader.h"
#include "daemon/feed/rows.h"
#include "daemon/feed/text.h"
#include "strategies/digest/sha256.h"

namespace nightweigh::feed {

namespace {

// The data row that holds the byte at `offset`: records that end before it, the header not counted.
std::size_t row_at(std::string_view text, std::size_t offset) {
  CsvReader reader(text.substr(0, offset));
  std::size_t records = 0;
  while (reader.next() == CsvReader::Step::record) records += reader.ended_by_break() ? 1 : 0;
  return records;
}

// The columns in the order of the header; nullopt stands for one that was refused.
using Header = std::vector<std::optional<Column>>;

bool read_header(CsvReader& reader, RowCollector& rows, Header& header) {
  const CsvReader::Step step = reader.next();
  if (step == CsvReader::Step::end || (step == CsvReader::Step::record && reader.is_blank())) {
    rows.report({ErrorKind::bad_input, 0, "", "", "has no header row",
                 "Start with a header row such as date,instrument,close"});
    return false;
  }
  if (step == CsvReader::Step::fault) {
    rows.report({ErrorKind::bad_input, 0, "", "", "the header row " + reader.problem(), reader.remedy()});
    return false;
  }
  if (reader.field_count() > CsvReader::fields_kept_max) {
    rows.report({ErrorKind::limit, 0, "", std::to_string(reader.field_count()),
                 "the header row has more than " + std::to_string(CsvReader::fields_kept_max) + " columns",
                 "Send the columns date, instrument, close, revision, dividend, split"});
    return false;
  }
  const std::string_view first = reader.fields().front();
  if (reader.field_count() == 1 && first.find_first_of(";\t|") != std::string_view::npos) {
    rows.report({ErrorKind::bad_input, 0, "", shown_start(first), "the header row is not separated by commas",
                 "Separate the fields by commas, as in date,instrument,close"});
    return false;
  }
  bool good = true;
  std::array<bool, column_count> seen{};
  for (const std::string_view name : reader.fields()) {
    const std::optional<Column> column = column_named(name);
    header.push_back(column);
    if (!column) {
      good = false;
      RowError error = column_refused(0, name);
      if (name.empty()) {
        error.problem = "the header row has a column without a name";
        error.remedy = "Name it, or leave it out";
      }
      rows.report(std::move(error));
    } else if (std::exchange(seen.at(static_cast<std::size_t>(*column)), true)) {
      good = false;
      rows.report({ErrorKind::bad_input, 0, std::string(name), "", "stands twice in the header row",
                   "Keep one of the two"});
    }
  }
  for (const Column column : {Column::date, Column::instrument, Column::close}) {
    if (seen.at(static_cast<std::size_t>(column))) continue;
    good = false;
    rows.report({ErrorKind::bad_input, 0, std::string(column_name(column)), "",
                 "is missing from the header row", "Give the columns date, instrument and close"});
  }
  return good;
}

void read_rows(CsvReader& reader, RowCollector& rows, const Header& header) {
  std::size_t row = 0;
  std::size_t blank_row = 0;  // the first of the empty lines just passed; only a text's end may have them
  while (!rows.stopped()) {
    const CsvReader::Step step = reader.next();
    if (step == CsvReader::Step::end) return;
    ++row;
    if (step == CsvReader::Step::fault) {
      // Behind a broken quote nothing can be trusted to be a row.
      return rows.report_and_stop({ErrorKind::bad_input, row, "", "", reader.problem(), reader.remedy()});
    }
    if (reader.is_blank()) {
      if (blank_row == 0) blank_row = row;
      continue;
    }
    if (blank_row != 0) {
      rows.report({ErrorKind::bad_input, blank_row, "", "", "is an empty line", "Leave it out"});
      blank_row = 0;
    }
    if (reader.field_count() != header.size()) {
      const bool more = reader.field_count() > header.size();
      rows.report(
          {ErrorKind::bad_input, row, "", "",
           "has " + std::to_string(reader.field_count()) + " fields where the header has " +
               std::to_string(header.size()),
           more ? "Write one field for each column; a decimal comma splits a number in two, write 61.20"
                : "Write one field for each column, empty where there is no value"});
      continue;
    }
    Cells cells;
    for (std::size_t i = 0; i < header.size(); ++i) {
      if (!header[i]) continue;
      Cell& cell = cells.at(static_cast<std::size_t>(*header[i]));
      cell.state = Cell::State::present;
      cell.text = reader.fields()[i];
    }
    rows.add(row, cells);
  }
}

}  // namespace

ParsedBatch parse_csv(std::string_view bytes, const Limits& limits) {
  RowCollector rows(limits);
  std::string digest = sha256_hex(bytes);
  if (bytes.size() > limits.bytes_max) {
    rows.report({ErrorKind::limit, 0, "", "",
                 "is " + std::to_string(bytes.size()) + " bytes, more than the limit of " +
                     std::to_string(limits.bytes_max),
                 "Send the rows as several batches"});
    return rows.finish(std::move(digest));
  }
  if (auto fault = find_encoding_fault(bytes)) {
    rows.report(
        {ErrorKind::bad_input, row_at(bytes, fault->at), "", fault->value, fault->problem, fault->remedy});
    return rows.finish(std::move(digest));
  }
  const bool marked = bytes.substr(0, utf8_mark.size()) == utf8_mark;
  CsvReader reader(marked ? bytes.substr(utf8_mark.size()) : bytes);
  Header header;
  if (read_header(reader, rows, header)) read_rows(reader, rows, header);
  return rows.finish(std::move(digest));
}

}  // namespace nightweigh::feed

#include "daemon/feed/rows.h"

#include <algorithm>
#include <tuple>
#include <utility>

#include "daemon/domain/instrument.h"
#include "daemon/feed/text.h"

namespace nightweigh::feed {

namespace {

constexpr std::array<std::string_view, column_count> column_names = {"date",     "instrument", "close",
                                                                     "revision", "dividend",   "split"};
constexpr std::array<std::string_view, 4> later_columns = {"volume", "pay_date", "relative", "currency"};

// 12 digits before the point and 10 after it hold every price, and leave room for exact products.
constexpr int integer_digits_max = 12;
constexpr int scale_max = 10;
constexpr std::string_view number_remedy = "Write a decimal number like 61.20";

bool is_digit(char c) {
  return c >= '0' && c <= '9';
}
bool all_digits(std::string_view text) {
  return std::all_of(text.begin(), text.end(), is_digit);
}

std::string lower(std::string_view text) {
  std::string out(text);
  for (char& c : out) {
    if (c >= 'A' && c <= 'Z') c = static_cast<char>(c - 'A' + 'a');
  }
  return out;
}

struct Complaint {
  std::string problem;
  std::string remedy;
  ErrorKind kind = ErrorKind::bad_input;
};

// Says what keeps `text` from being a decimal number; called only where Decimal::parse said no.
Complaint complaint_of_number(std::string_view text, Column column) {
  if (text.empty()) return {"is empty", std::string(number_remedy)};
  const auto is_space = [](char c) { return c == ' ' || c == '\t' || c == '\n' || c == '\r'; };
  if (is_space(text.front()) || is_space(text.back())) {
    return {"has spaces around it", "Write the number without spaces"};
  }
  const std::string_view unsigned_text = text.front() == '-' || text.front() == '+' ? text.substr(1) : text;
  const std::string small = lower(unsigned_text.substr(0, 9));
  if (small == "inf" || small == "infinity" || small.substr(0, 3) == "nan") {
    return {"is not a finite number",
            "Write a decimal number like 61.20, or leave the row out where there is no close"};
  }
  if (column == Column::split && text.find(':') != std::string_view::npos) {
    return {"is a ratio, which this version does not read",
            "Write the split as a decimal number: 1.5 for 3:2", ErrorKind::not_built};
  }
  if (text.front() == '+') return {"has a plus sign", "Write the number without the plus sign"};
  const std::size_t point = unsigned_text.find('.');
  const std::string_view whole = unsigned_text.substr(0, point);
  const std::string_view fraction =
      point == std::string_view::npos ? std::string_view{} : unsigned_text.substr(point + 1);
  if (all_digits(whole) && all_digits(fraction) && !(whole.empty() && fraction.empty())) {
    if (whole.empty()) return {"starts with the decimal point", "Write a digit before the point, as in 0.5"};
    if (point != std::string_view::npos && fraction.empty()) {
      return {"ends with the decimal point", "Leave the point out or write digits after it, as in 12.0"};
    }
    return {"has more than " + std::to_string(integer_digits_max) + " digits before the point or more than " +
                std::to_string(scale_max) + " after it",
            "Write at most " + std::to_string(integer_digits_max) + " digits before and " +
                std::to_string(scale_max) + " after the decimal point"};
  }
  const auto only = [&](std::string_view allowed) {
    return unsigned_text.find_first_not_of(allowed) == std::string_view::npos;
  };
  if (only("0123456789.,") && unsigned_text.find(',') != std::string_view::npos) {
    return {"has a comma", "Write a decimal point and no digit grouping, as in 61.20 or 1234.50"};
  }
  if (only("0123456789.eE+-") && unsigned_text.find_first_of("eE") != std::string_view::npos &&
      is_digit(unsigned_text.front())) {
    return {"is written with an exponent", "Write the number out, as in 100000 for 1e5"};
  }
  return {"is not a decimal number", std::string(number_remedy)};
}

Complaint complaint_of_date(std::string_view text) {
  if (text.empty()) return {"is empty", "Write the close's date as YYYY-MM-DD, like 2026-03-02"};
  const bool form = text.size() == 10 && text[4] == '-' && text[7] == '-' && all_digits(text.substr(0, 4)) &&
                    all_digits(text.substr(5, 2)) && all_digits(text.substr(8, 2));
  if (!form)
    return {"is not an ISO 8601 date", "Write it as YYYY-MM-DD, like 2026-03-02, and nothing after it"};
  if (text < "1900" || text >= "2200") return {"is not a year from 1900 to 2199", "Correct the year"};
  return {"is not a day of the calendar", "Correct the month or the day"};
}

Complaint complaint_of_instrument(std::string_view text) {
  if (text.empty()) return {"is empty", "Write the instrument's id as in the settings"};
  if (text == cash_line) return {"is the name of the cash line, which has no close", "Leave the row out"};
  return {"is not the form of an instrument's id",
          "Write the id as in the settings: 1 to 32 of A-Z 0-9 . _ -, starting with a letter or a digit"};
}

auto key_of(const Close& close) {
  return std::tie(close.date, close.instrument, close.revision);
}

}  // namespace

std::string_view column_name(Column column) {
  return column_names.at(static_cast<std::size_t>(column));
}

std::optional<Column> column_named(std::string_view name) {
  for (std::size_t i = 0; i < column_count; ++i) {
    if (column_names.at(i) == name) return static_cast<Column>(i);
  }
  return std::nullopt;
}

RowError column_refused(std::size_t row, std::string_view name) {
  RowError error;
  error.row = row;
  error.column = shown_start(name);
  if (std::find(later_columns.begin(), later_columns.end(), name) != later_columns.end()) {
    error.kind = ErrorKind::not_built;
    error.problem = "this version does not read the column " + std::string(name);
    error.remedy = "Leave it out";
    return error;
  }
  error.problem = "is an unknown column";
  const std::size_t first = name.find_first_not_of(" \t"), last = name.find_last_not_of(" \t");
  const std::string plain = first == std::string_view::npos || name.size() > 40
                                ? std::string()
                                : lower(name.substr(first, last - first + 1));
  error.remedy = plain != name && column_named(plain)
                     ? "Write it as " + plain + ": lower case, without spaces"
                     : "Leave it out; the columns are date, instrument, close, revision, dividend, split";
  return error;
}

std::optional<Decimal> RowCollector::read_number(std::size_t row, Column column, std::string_view text) {
  auto number = Decimal::parse(text, integer_digits_max, scale_max);
  if (number) return number;
  Complaint complaint = complaint_of_number(text, column);
  report({complaint.kind, row, std::string(column_name(column)), shown_start(text),
          std::move(complaint.problem), std::move(complaint.remedy)});
  return std::nullopt;
}

void RowCollector::add(std::size_t row, const Cells& cells) {
  if (stopped_) return;
  if (rows_.size() >= limits_.rows_max) {
    return report_and_stop(
        {ErrorKind::limit, row, "", "",
         "is beyond the limit of " + std::to_string(limits_.rows_max) + " rows in one batch",
         "Send the rows as several batches"});
  }
  bool good = true;
  const auto fail = [&](Column column, Complaint complaint) {
    good = false;
    const Cell& cell = cells.at(static_cast<std::size_t>(column));
    report({complaint.kind, row, std::string(column_name(column)), shown_start(cell.text),
            std::move(complaint.problem), std::move(complaint.remedy)});
  };
  // The text of a cell to look at; nullopt where there is none, or where it is reported already.
  const auto text_of = [&](Column column) -> std::optional<std::string_view> {
    const Cell& cell = cells.at(static_cast<std::size_t>(column));
    if (cell.state == Cell::State::present) {
      if (cell.text.empty() && !is_required(column)) return std::nullopt;
      return cell.text;
    }
    if (cell.state == Cell::State::faulty) good = false;
    if (cell.state == Cell::State::absent && is_required(column)) {
      fail(column, {"is missing", "Give date, instrument and close in every row"});
    }
    return std::nullopt;
  };

  ParsedBatch::Row& out = rows_.emplace_back();
  out.row = row;
  if (const auto text = text_of(Column::date)) {
    if (const auto date = Date::parse(*text)) {
      out.close.date = *date;
    } else {
      fail(Column::date, complaint_of_date(*text));
    }
  }
  if (const auto text = text_of(Column::instrument)) {
    if (is_instrument_id(*text)) {
      out.close.instrument = *text;
    } else {
      fail(Column::instrument, complaint_of_instrument(*text));
    }
  }
  if (const auto text = text_of(Column::close)) {
    const auto number = read_number(row, Column::close, *text);
    if (!number) {
      good = false;
    } else if (!number->is_positive()) {
      fail(Column::close, {number->is_zero() ? "is zero" : "is negative",
                           "Write a close above zero, or leave the row out where there is none"});
    } else {
      out.close.close = *number;
    }
  }
  if (const auto text = text_of(Column::revision)) {
    if (text->size() > 6 || !all_digits(*text)) {
      fail(Column::revision, {"is not a whole number from 0 to 999999",
                              "Write 0 or leave it empty for the first value, 1 for the first correction"});
    } else {
      for (const char c : *text) out.close.revision = out.close.revision * 10 + (c - '0');
    }
  }
  if (const auto text = text_of(Column::dividend)) {
    const auto number = read_number(row, Column::dividend, *text);
    if (!number) {
      good = false;
    } else if (number->is_negative()) {
      fail(Column::dividend, {"is negative", "Write the cash a share going ex that day, or leave it empty"});
    } else if (!number->is_zero()) {  // data jobs write 0 where there is none
      out.close.dividend = *number;
    }
  }
  if (const auto text = text_of(Column::split)) {
    const auto number = read_number(row, Column::split, *text);
    if (!number) {
      good = false;
    } else if (!number->is_positive()) {
      fail(Column::split,
           {number->is_zero() ? "is zero" : "is negative",
            "Write the new shares for one old share, or leave it empty where there is no split"});
    } else if (*number < Decimal::scaled(1, 6) || *number > Decimal(1'000'000)) {
      fail(Column::split,
           {"is not between 0.000001 and 1000000", "Write the new shares for one old share, like 2 or 0.1"});
    } else if (*number != Decimal(1)) {  // one new share for one old share is no split
      out.close.split = *number;
    }
  }
  if (!good) rows_.pop_back();
}

void RowCollector::report(RowError error) {
  if (errors_.size() >= limits_.errors_max) {
    more_mistakes_ = stopped_ = true;
    return;
  }
  errors_.push_back(std::move(error));
}

void RowCollector::report_and_stop(RowError error) {
  report(std::move(error));
  stopped_ = true;
}

void RowCollector::compare_repeated() {
  const auto before = [&](const ParsedBatch::Row& a, const ParsedBatch::Row& b) {
    return key_of(a.close) < key_of(b.close);
  };
  // Data jobs write rows in order: one pass then shows that no key repeats.
  const bool ascending = std::adjacent_find(rows_.begin(), rows_.end(), [&](const auto& a, const auto& b) {
                           return !before(a, b);
                         }) == rows_.end();
  if (ascending) return;

  std::vector<std::size_t> order(rows_.size());
  for (std::size_t i = 0; i < order.size(); ++i) order[i] = i;
  std::stable_sort(order.begin(), order.end(),
                   [&](std::size_t a, std::size_t b) { return before(rows_[a], rows_[b]); });
  std::vector<bool> dropped(rows_.size(), false);
  std::vector<std::pair<std::size_t, std::size_t>> contradictions;  // later row, first row
  for (std::size_t i = 0, first = 0; i < order.size(); ++i) {
    const Close& close = rows_[order[i]].close;
    const Close& earlier = rows_[order[first]].close;
    if (key_of(close) != key_of(earlier)) {
      first = i;
    } else if (i != first) {
      dropped[order[i]] = true;
      if (!(close == earlier)) contradictions.emplace_back(order[i], order[first]);
    }
  }
  std::sort(contradictions.begin(), contradictions.end());
  const auto text_of = [](const std::optional<Decimal>& value) {
    return value ? value->to_string() : "none";
  };
  for (const auto& [later, first] : contradictions) {
    const Close &a = rows_[first].close, &b = rows_[later].close;
    const Column column = a.close != b.close         ? Column::close
                          : a.dividend != b.dividend ? Column::dividend
                                                     : Column::split;
    const auto value = [&](const Close& close) {
      return column == Column::close      ? close.close.to_string()
             : column == Column::dividend ? text_of(close.dividend)
                                          : text_of(close.split);
    };
    report({ErrorKind::bad_input, rows_[later].row, std::string(column_name(column)), value(b),
            "contradicts row " + std::to_string(rows_[first].row) + ", which says " + value(a) + " for " +
                b.instrument + " on " + b.date.to_string() + ", revision " + std::to_string(b.revision),
            "Keep one of the two rows; a correction carries a higher revision"});
  }
  std::size_t kept = 0;
  for (std::size_t i = 0; i < rows_.size(); ++i) {
    if (dropped[i]) continue;
    if (kept != i) rows_[kept] = std::move(rows_[i]);
    ++kept;
  }
  rows_.erase(rows_.begin() + static_cast<std::ptrdiff_t>(kept), rows_.end());
}

ParsedBatch RowCollector::finish(std::string digest) {
  if (!stopped_) compare_repeated();
  if (rows_.empty() && errors_.empty()) {
    report({ErrorKind::bad_input, 0, "", "", "has no rows", "Send at least one close"});
  }
  std::stable_sort(errors_.begin(), errors_.end(),
                   [](const RowError& a, const RowError& b) { return a.row < b.row; });
  if (more_mistakes_) {
    errors_.push_back(
        {ErrorKind::bad_input, 0, "", "",
         "has more mistakes than these " + std::to_string(limits_.errors_max) + ", where reporting stopped",
         "Mend these first and send the batch again"});
  }
  return {std::move(digest), std::move(rows_), std::move(errors_)};
}

}  // namespace nightweigh::feed

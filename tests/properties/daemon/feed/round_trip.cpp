// Any valid batch, written in any of the ways that the formats allow, parses to the same rows.
#include <doctest/doctest.h>
#include <rapidcheck.h>

#include <algorithm>
#include <random>
#include <set>
#include <string>
#include <vector>

#include "daemon/feed/batch.h"
#include "daemon/feed/batch_line.h"

namespace nightweigh::feed {
namespace {

const Limits limits;

// A close and the texts that stand for it.
struct Written {
  Close close;
  std::vector<std::pair<std::string, std::string>> cells;  // name, text ("" = none)
};

using Random = std::mt19937;
int pick(Random& random, int low, int high) {
  return std::uniform_int_distribution<int>(low, high)(random);
}

// A positive number and a text for it, sometimes with zeros that do not count.
std::pair<Decimal, std::string> number(Random& random, int places_max) {
  const int places = pick(random, 0, places_max);
  std::string whole = std::to_string(pick(random, 1, 999'999)), fraction;
  for (int i = 0; i < places; ++i) fraction += static_cast<char>('0' + pick(random, 0, 9));
  std::string text = whole + (fraction.empty() ? "" : "." + fraction);
  const Decimal value = *Decimal::parse(text, 12, 10);
  if (!fraction.empty()) text += std::string(static_cast<std::size_t>(pick(random, 0, 3)), '0');
  return {value, text};
}

std::vector<Written> batch(Random& random) {
  static const std::vector<std::string> ids = {"ALDER", "BRINE", "COPPER", "D.1", "E-2", "F_3", "0"};
  std::vector<Written> out;
  std::set<std::tuple<Date, std::string, int>> keys;
  const int rows = pick(random, 1, 30);
  for (int i = 0; i < rows; ++i) {
    Written row;
    row.close.date = Date::parse("2025-12-20")->plus_days(pick(random, 0, 20));
    row.close.instrument = ids[static_cast<std::size_t>(pick(random, 0, static_cast<int>(ids.size()) - 1))];
    row.close.revision = pick(random, 0, 3) == 0 ? pick(random, 1, 999'999) : 0;
    if (!keys.emplace(row.close.date, row.close.instrument, row.close.revision).second) continue;
    auto [close, close_text] = number(random, 10);
    row.close.close = close;
    row.cells = {
        {"date", row.close.date.to_string()}, {"instrument", row.close.instrument}, {"close", close_text}};
    row.cells.emplace_back("revision", row.close.revision == 0 && pick(random, 0, 1) == 0
                                           ? ""
                                           : std::to_string(row.close.revision));
    std::string dividend_text = pick(random, 0, 1) == 0 ? "" : "0.00",
                split_text = pick(random, 0, 1) == 0 ? "" : "1";
    if (pick(random, 0, 2) == 0) {
      auto [dividend, text] = number(random, 4);
      row.close.dividend = dividend;
      dividend_text = text;
    }
    if (pick(random, 0, 2) == 0) {
      auto [split, text] = number(random, 3);
      if (split != Decimal(1)) row.close.split = split;
      split_text = text;
    }
    row.cells.emplace_back("dividend", dividend_text);
    row.cells.emplace_back("split", split_text);
    out.push_back(std::move(row));
  }
  return out;
}

std::string as_csv(Random& random, const std::vector<Written>& rows) {
  std::vector<std::size_t> order = {0, 1, 2, 3, 4, 5};
  std::shuffle(order.begin(), order.end(), random);
  const std::string line_end = pick(random, 0, 1) == 0 ? "\n" : "\r\n";
  std::string text = pick(random, 0, 3) == 0 ? "\xEF\xBB\xBF" : "";
  const auto field = [&](const std::string& value) {
    return pick(random, 0, 2) == 0 ? "\"" + value + "\"" : value;
  };
  const auto record = [&](const auto& value_of) {
    for (std::size_t i = 0; i < order.size(); ++i) text += (i > 0 ? "," : "") + field(value_of(order[i]));
  };
  record([&](std::size_t i) { return rows.front().cells[i].first; });
  for (const Written& row : rows) {
    text += line_end;
    record([&](std::size_t i) { return row.cells[i].second; });
  }
  if (pick(random, 0, 1) == 0) text += line_end;
  return text;
}

std::string as_json(Random& random, const std::vector<Written>& rows) {
  const auto space = [&] { return std::string(static_cast<std::size_t>(pick(random, 0, 1)), ' '); };
  std::string text = "{" + space() + "\"closes\":" + space() + "[";
  for (std::size_t i = 0; i < rows.size(); ++i) {
    auto cells = rows[i].cells;
    std::shuffle(cells.begin(), cells.end(), random);
    text += (i > 0 ? "," : "") + space() + "{";
    bool first = true;
    for (const auto& [name, value] : cells) {
      const bool is_text = name == "date" || name == "instrument";
      std::string written = "\"" + value + "\"";
      if (value.empty()) {
        const int way = pick(random, 0, 2);
        if (way == 0) continue;
        if (way == 1) written = "null";
      } else if (!is_text && pick(random, 0, 1) == 0) {
        written = value;  // a JSON number
      }
      text += (first ? "" : ",") + space() + "\"" + name + "\":" + space() + written;
      first = false;
    }
    text += "}";
  }
  return text + "]}";
}

void expect_rows(const ParsedBatch& parsed, const std::vector<Written>& rows) {
  for (const RowError& error : parsed.errors) RC_LOG() << error.message() << "\n";
  RC_ASSERT(parsed.ok());
  RC_ASSERT(parsed.rows.size() == rows.size());
  for (std::size_t i = 0; i < rows.size(); ++i) {
    RC_ASSERT(parsed.rows[i].row == i + 1);
    RC_ASSERT(parsed.rows[i].close == rows[i].close);
  }
}

TEST_CASE("CSV in any order, quoting and line ends; JSON in any order of keys; the line made of the CSV") {
  CHECK(rc::check([](std::uint32_t seed) {
    Random random(seed);
    const std::vector<Written> rows = batch(random);
    const std::string csv = as_csv(random, rows), json = as_json(random, rows);
    RC_LOG() << csv << "\n" << json << "\n";
    expect_rows(parse_csv(csv, limits), rows);
    expect_rows(parse_json(json, limits), rows);
    const BatchLine line = csv_to_line(csv, limits);
    RC_ASSERT(line.ok());
    expect_rows(parse_json(line.line, limits), rows);
  }));
}

TEST_CASE("one byte changed or cut anywhere: an answer, never a crash; what is refused has a reason") {
  CHECK(rc::check([](std::uint32_t seed) {
    Random random(seed);
    const std::vector<Written> rows = batch(random);
    for (const bool is_json : {false, true}) {
      std::string text = is_json ? as_json(random, rows) : as_csv(random, rows);
      const auto at = static_cast<std::size_t>(pick(random, 0, static_cast<int>(text.size()) - 1));
      if (pick(random, 0, 1) == 0) {
        text[at] = static_cast<char>(pick(random, 0, 255));
      } else {
        text.resize(at);
      }
      const ParsedBatch parsed = is_json ? parse_json(text, limits) : parse_csv(text, limits);
      const bool explained = parsed.ok() ? !parsed.rows.empty() && parsed.rows.size() <= rows.size()
                                         : !parsed.errors.front().message().empty();
      RC_ASSERT(explained);
    }
  }));
}

}  // namespace
}  // namespace nightweigh::feed

#include "daemon/settings/values.h"

#include <algorithm>
#include <charconv>
#include <cmath>

namespace nightweigh::settings {

namespace {

const Node& empty_map() {
  static const Node node = [] {
    Node map;
    map.kind = Node::Kind::map;
    return map;
  }();
  return node;
}

// True where the value is a scalar; reports null, lists and maps.
bool is_scalar(const Value& value, Problems& problems, const std::string& remedy) {
  switch (value.node->kind) {
    case Node::Kind::scalar:
      return true;
    case Node::Kind::broken:
      return false;
    case Node::Kind::null:
      refuse(problems, value, "has no value", remedy);
      return false;
    case Node::Kind::list:
    case Node::Kind::map:
      refuse(problems, value, "is not a single value", remedy);
      return false;
  }
  return false;
}

// The whole text as a finite number. from_chars also knows "inf" and "nan": they begin with a letter.
std::optional<double> finite_number(const std::string& text) {
  double number = 0;
  const char* end = text.data() + text.size();
  const auto [stop, code] = std::from_chars(text.data(), end, number);
  if (code != std::errc() || stop != end || !std::isfinite(number)) return std::nullopt;
  return number + 0.0;  // -0 becomes 0, so that equal settings have equal text
}

}  // namespace

std::string shown_node(const Node& node) {
  switch (node.kind) {
    case Node::Kind::scalar:
      return node.text;
    case Node::Kind::null:
      return "null";
    case Node::Kind::list:
      return "a list";
    case Node::Kind::map:
      return "a map";
    case Node::Kind::broken:
      return "";
  }
  return "";
}

void refuse(Problems& problems, const Value& value, const std::string& problem, const std::string& remedy,
            ErrorKind kind) {
  problems.add(value.node->at, value.path, problem, shown_node(*value.node), remedy, kind);
}

std::optional<std::string> read_text(const Value& value, Problems& problems, const std::string& remedy) {
  if (!is_scalar(value, problems, remedy)) return std::nullopt;
  return value.node->text;
}

std::optional<double> read_number(const Value& value, const Range& range, Problems& problems) {
  const std::string remedy = std::string("write a number ") + range.words;
  if (!is_scalar(value, problems, remedy)) return std::nullopt;
  const auto number = finite_number(value.node->text);
  if (!number) {
    refuse(problems, value, "is not a finite number", remedy);
    return std::nullopt;
  }
  const bool high_enough = range.low_open ? *number > range.low : *number >= range.low;
  const bool low_enough = range.high_open ? *number < range.high : *number <= range.high;
  if (!high_enough || !low_enough) {
    refuse(problems, value, "is out of range", remedy);
    return std::nullopt;
  }
  return number;
}

std::optional<int> read_whole(const Value& value, int low, int high, Problems& problems) {
  const std::string remedy =
      "write a whole number from " + std::to_string(low) + " to " + std::to_string(high);
  if (!is_scalar(value, problems, remedy)) return std::nullopt;
  const std::string& text = value.node->text;
  int number = 0;
  const auto [stop, code] = std::from_chars(text.data(), text.data() + text.size(), number);
  if (code != std::errc() || stop != text.data() + text.size()) {
    refuse(problems, value, "is not a whole number", remedy);
    return std::nullopt;
  }
  if (number < low || number > high) {
    refuse(problems, value, "is out of range", remedy);
    return std::nullopt;
  }
  return number;
}

std::optional<Decimal> read_decimal(const Value& value, const Decimal& low, const Decimal& high,
                                    const char* words, Problems& problems) {
  const std::string remedy = std::string("write a number ") + words;
  if (!is_scalar(value, problems, remedy)) return std::nullopt;
  const auto number = Decimal::parse(value.node->text, 15, 10);
  if (!number) {
    refuse(problems, value, "is not a plain decimal number",
           remedy + ", with at most 15 digits before and 10 after the point, and no exponent");
    return std::nullopt;
  }
  if (*number < low || *number > high) {
    refuse(problems, value, "is out of range", remedy);
    return std::nullopt;
  }
  return number;
}

std::optional<bool> read_boolean(const Value& value, Problems& problems) {
  if (value.is_plain("true")) return true;
  if (value.is_plain("false")) return false;
  if (is_scalar(value, problems, "write true or false")) {
    refuse(problems, value, "is neither true nor false", "write true or false, without quotes");
  }
  return std::nullopt;
}

std::optional<Date> read_date(const Value& value, Problems& problems) {
  const std::string remedy = "write a date like 2025-01-02, from 1900-01-01 to 2199-12-31";
  if (!is_scalar(value, problems, remedy)) return std::nullopt;
  const auto date = Date::parse(value.node->text);
  if (!date) refuse(problems, value, "is not a date", remedy);
  return date;
}

std::optional<std::string> read_word(const Value& value, const std::vector<std::string>& words,
                                     Problems& problems) {
  std::string list;
  for (std::size_t i = 0; i < words.size(); ++i) {
    if (i > 0) list += i + 1 == words.size() ? " or " : ", ";
    list += words[i];
  }
  if (!is_scalar(value, problems, "write " + list)) return std::nullopt;
  const std::string& text = value.node->text;
  if (std::find(words.begin(), words.end(), text) != words.end()) return text;
  const std::string near = nearest_word(text, words);
  refuse(problems, value, "is not known here",
         near.empty() ? "write " + list : "did you mean " + near + "? Known: " + list);
  return std::nullopt;
}

bool is_filled_list(const Value& value, Problems& problems, const std::string& remedy) {
  if (value.node->kind == Node::Kind::broken) return false;
  if (value.node->kind != Node::Kind::list) {
    refuse(problems, value, "is not a list", remedy);
    return false;
  }
  if (value.node->items.empty()) {
    problems.add(value.node->at, value.path, "is an empty list", "", remedy);
    return false;
  }
  return true;
}

bool OffValue::matches(const Node& node) const {
  switch (kind) {
    case Kind::number: {
      const auto value = node.kind == Node::Kind::scalar ? finite_number(node.text) : std::nullopt;
      return value && *value == number;
    }
    case Kind::text:
      return node.kind == Node::Kind::scalar && node.text == text;
    case Kind::boolean:
      return node.kind == Node::Kind::scalar && !node.quoted && node.text == text;
    case Kind::null:
      return node.kind == Node::Kind::null;
    case Kind::empty_map:
      return node.kind == Node::Kind::map && node.entries.empty();
  }
  return false;
}

std::string OffValue::to_string() const {
  if (kind == Kind::number) return std::to_string(static_cast<int>(number));
  return *text == '\0' ? "\"\"" : text;
}

MapReader::MapReader(const Value& map, Problems& problems, const std::string& remedy)
    : map_(map), problems_(problems) {
  if (is_map()) return;
  if (map_.node->kind == Node::Kind::null) {
    refuse(problems, map_, "has no value", remedy);
  } else if (map_.node->kind != Node::Kind::broken) {
    refuse(problems, map_, "is not a map of keys", remedy);
  }
}

std::optional<Value> MapReader::optional(const std::string& key) {
  known_.push_back(key);
  if (!is_map()) return std::nullopt;
  const auto& entries = map_.node->entries;
  const auto entry =
      std::find_if(entries.begin(), entries.end(), [&](const Entry& e) { return e.key == key; });
  if (entry == entries.end()) return std::nullopt;
  return Value{&entry->value, joined(map_.path, key)};
}

std::optional<Value> MapReader::required(const std::string& key, const std::string& remedy) {
  auto found = optional(key);
  if (!found && is_map()) {
    problems_.add(map_.node->at, map_.path, "lacks the required key", key, remedy);
  }
  return found;
}

void MapReader::accept_only(const std::string& key, const OffValue& off) {
  const auto value = optional(key);
  if (!value || value->node->kind == Node::Kind::broken || off.matches(*value->node)) return;
  const std::string accepted = off.to_string();
  refuse(problems_, *value, "is not in this version, which accepts only " + accepted,
         "write " + accepted + " or leave the key out", ErrorKind::not_built);
}

MapReader MapReader::part(const std::string& key) {
  const auto value = optional(key);
  return MapReader(value ? *value : Value{&empty_map(), joined(map_.path, key)}, problems_,
                   "write its keys, or leave it out");
}

void MapReader::finish() {
  if (!is_map()) return;
  for (const Entry& entry : map_.node->entries) {
    if (std::find(known_.begin(), known_.end(), entry.key) != known_.end()) continue;
    const std::string near = nearest_word(entry.key, known_);
    problems_.add(entry.at, joined(map_.path, entry.key), "is an unknown key", entry.key,
                  near.empty() ? "remove it" : "did you mean " + near + "?");
  }
}

}  // namespace nightweigh::settings

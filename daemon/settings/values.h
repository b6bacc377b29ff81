// Strict readers of single values and maps. Each reports what is wrong, and returns nothing then.
#pragma once

#include <optional>
#include <string>
#include <vector>

#include "daemon/domain/date.h"
#include "daemon/domain/decimal.h"
#include "daemon/settings/document.h"

namespace nightweigh::settings {

// A node with its full name.
struct Value {
  const Node* node = nullptr;
  std::string path;

  bool is_null() const { return node->kind == Node::Kind::null; }
  bool is_text() const { return node->kind == Node::Kind::scalar; }
  bool is_plain(const char* text) const { return is_text() && !node->quoted && node->text == text; }
  Value item(std::size_t i) const { return {&node->items[i], indexed(path, i)}; }
};

// What stands there, for a message: the text, "null", "a list", "a map".
std::string shown_node(const Node& node);

void refuse(Problems& problems, const Value& value, const std::string& problem, const std::string& remedy,
            ErrorKind kind = ErrorKind::bad_settings);

// The domain of a number, and its words for the remedy: "above 0 and at most 1".
struct Range {
  double low, high;
  bool low_open, high_open;
  const char* words;
};

std::optional<std::string> read_text(const Value& value, Problems& problems, const std::string& remedy);
// By std::from_chars on the text: finite, no locale, no sign '+'.
std::optional<double> read_number(const Value& value, const Range& range, Problems& problems);
std::optional<int> read_whole(const Value& value, int low, int high, Problems& problems);
// By Decimal::parse with at most 15 digits before and 10 after the point. `words` as in Range.
std::optional<Decimal> read_decimal(const Value& value, const Decimal& low, const Decimal& high,
                                    const char* words, Problems& problems);
std::optional<bool> read_boolean(const Value& value,
                                 Problems& problems);  // plain true or false, nothing else
std::optional<Date> read_date(const Value& value, Problems& problems);
// One of the words; suggests the nearest.
std::optional<std::string> read_word(const Value& value, const std::vector<std::string>& words,
                                     Problems& problems);

// True where the value is a list with items; reports otherwise.
bool is_filled_list(const Value& value, Problems& problems, const std::string& remedy);

// The value at which a key of a feature that is not built may stand.
struct OffValue {
  enum class Kind { number, text, boolean, null, empty_map } kind;
  double number = 0;
  const char* text = "";

  static OffValue of(double number) { return {Kind::number, number, ""}; }
  static OffValue word(const char* text) { return {Kind::text, 0, text}; }
  static OffValue no() { return {Kind::boolean, 0, "false"}; }
  static OffValue nothing() { return {Kind::null, 0, "null"}; }
  static OffValue no_entries() { return {Kind::empty_map, 0, "{}"}; }

  bool matches(const Node& node) const;
  std::string to_string() const;
};

// A map with the keys that it knows: a key that nobody asked for is unknown.
class MapReader {
 public:
  // Anything but a map is reported, and then read as a map without entries.
  MapReader(const Value& map, Problems& problems, const std::string& remedy);

  // nullopt where the key is absent. A key may be asked for once.
  std::optional<Value> optional(const std::string& key);
  // The same, and absence is reported.
  std::optional<Value> required(const std::string& key, const std::string& remedy);
  // A key whose feature is not built: any other value is refused by name.
  void accept_only(const std::string& key, const OffValue& off);
  // A part of the settings that is a map: an absent one has no keys.
  MapReader part(const std::string& key);

  // Reports the keys that were not asked for. Call it last.
  void finish();

  const Value& value() const { return map_; }
  // False where there was no map to read: what is missing then has been said.
  bool is_map() const { return map_.node->kind == Node::Kind::map; }

 private:
  Value map_;
  Problems& problems_;
  std::vector<std::string> known_;
};

}  // namespace nightweigh::settings

// One YAML document as a plain tree with places. Everything that the settings do not allow is refused
// here: duplicate keys, anchors, aliases, tags, merge keys, keys that are no text, a second document,
// deep nesting, large files, text that is not UTF-8.
#pragma once

#include <optional>
#include <string>
#include <vector>

#include "daemon/settings/problems.h"

namespace nightweigh::settings {

inline constexpr std::size_t file_bytes_max = 1'000'000;
inline constexpr std::size_t depth_max = 16;

struct Entry;

struct Node {
  // broken: something was wrong here and has been reported; readers pass over it in silence.
  enum class Kind { null, scalar, map, list, broken } kind = Kind::null;
  std::string text;            // scalar
  bool quoted = false;         // scalar: stood in quotes, or as a block
  Position at;                 // of the value; of the key where the value is empty
  std::vector<Entry> entries;  // map, in file order, no key twice
  std::vector<Node> items;     // list
};

struct Entry {
  std::string key;
  Position at;
  Node value;
};

// nullopt where there is no tree to go on with; `problems` then says why. A tree may come with problems.
std::optional<Node> read_document(const std::string& text, Problems& problems);

// The whole of a regular file of at most file_bytes_max bytes. The error's place is the file.
Result<std::string> read_small_file(const std::filesystem::path& file);

// "books[0]" and "gate" make "books[0].gate"; unprintable keys are shown escaped.
std::string joined(const std::string& path, const std::string& key);
// "books" and 0 make "books[0]".
std::string indexed(const std::string& path, std::size_t i);

}  // namespace nightweigh::settings

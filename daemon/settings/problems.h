// Collects every problem of a settings file, so that all of them can be said at once and in file order.
#pragma once

#include <cstddef>
#include <filesystem>
#include <string>
#include <vector>

#include "daemon/domain/result.h"

namespace nightweigh::settings {

// A place in the file: both count from 1; 0 where there is none.
struct Position {
  int line = 0;
  int column = 0;
};

class Problems {
 public:
  // `file` as the user named it: it begins every place.
  explicit Problems(const std::filesystem::path& file) : file_(file.string()) {}

  // `path` is the key's full name, "books[0].gate.extra_gain"; empty for the document itself.
  void add(Position at, const std::string& path, std::string problem, const std::string& value,
           std::string remedy, ErrorKind kind = ErrorKind::bad_settings);

  // For a problem in another file that the settings name at `at`: the error carries its own place.
  void add_elsewhere(Position at, Error error);

  std::size_t count() const { return found_.size(); }

  // In file order; beyond `most` problems one last error says how many there are.
  Errors in_file_order(std::size_t most = 1000) const;

 private:
  struct Found {
    Position at;
    Error error;
  };
  std::string file_;
  std::vector<Found> found_;
};

// The known word nearest to `word`, where it is near enough to be meant; empty otherwise.
// O(length^2) a known word; words beyond 64 bytes are near to nothing.
std::string nearest_word(const std::string& word, const std::vector<std::string>& known);

}  // namespace nightweigh::settings

// What the drop folder does with one file: is it finished, what does it hold, and where does it go. Plain
// POSIX calls that never block on a pipe and never overwrite.
#pragma once

#include <sys/stat.h>

#include <cstdint>
#include <filesystem>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "daemon/domain/result.h"

namespace nightweigh::feed {

// What tells one state of a file from another.
struct FileState {
  std::uint64_t device = 0;
  std::uint64_t inode = 0;
  std::int64_t size = 0;
  std::int64_t modified_ns = 0;  // since 1970, UTC

  friend bool operator==(const FileState&, const FileState&) = default;
};
FileState state_of(const struct stat& status);

// The state of a regular file; nullopt for anything else (a folder, a link, a pipe, nothing at all).
std::optional<FileState> look_at(const std::filesystem::path& path);

// Names of the candidates in the folder, ascending by their bytes: no leading '.', no .part or .tmp at the
// end. Subfolders and other things that are no files are among them; look_at() tells.
Result<std::vector<std::string>> list_names(const std::filesystem::path& folder);

struct ReadFile {
  enum class Outcome {
    read,
    busy,       // somebody has it open for writing
    gone,       // no longer there, or no regular file any more
    too_large,  // more than bytes_max; nothing was read
    failed      // `problem` says why
  } outcome = Outcome::failed;
  std::string bytes;
  FileState state;  // of what was read
  std::string problem;
};
// Reads a file whole. A read lease held meanwhile shows that nobody writes to it; where the file system
// knows no leases, only the unchanged state before and after counts.
ReadFile read_file(const std::filesystem::path& path, std::size_t bytes_max);

// Moves path into `folder` (made if missing) under its own name, or a numbered one ("a-2.csv") where that
// is taken. If reason is not empty, <name>.reason.txt is written beside it first, whole or not at all. A
// file that is no longer in `state` is not moved: Error of kind conflict. Returns the new name.
Result<std::string> move_into(const std::filesystem::path& path, const FileState& state,
                              const std::filesystem::path& folder, const std::string& reason);

}  // namespace nightweigh::feed

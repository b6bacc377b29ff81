// Reading whole files, writing them so that a reader or a crash sees the old or the new one, and folders.
//
// Every Error names the path, the system's own words and what to do. Kinds: not_found (no such file or
// folder), limit (larger than allowed), bad_input (no regular file), storage (all else).
#pragma once

#include <cstddef>
#include <filesystem>
#include <string>
#include <string_view>

#include "daemon/domain/result.h"

namespace nightweigh::platform {

// The bytes of a regular file (or of a link to one) of at most bytes_max bytes. Never waits: a pipe or a
// device is refused. A file that grows while it is read is refused when it passes bytes_max.
Result<std::string> read_file(const std::filesystem::path& path, std::size_t bytes_max);

// Writes a temporary file ".<name>.<pid>-<number>.tmp" in the same folder, flushes it to the disk, renames it
// over `path`, flushes the folder. On an Error `path` is as it was and the temporary file is gone (a crash
// may leave it; its name starts with a point, so nothing takes it for a delivery). mode: the new file's
// rights before the process's umask, as of open(2).
Result<void> write_file_atomically(const std::filesystem::path& path, std::string_view bytes,
                                   unsigned mode = 0644);

// Flushes the bytes of `from` to the disk, renames it over `to` (same folder), flushes the folder.
Result<void> rename_durably(const std::filesystem::path& from, const std::filesystem::path& to);

// Makes the folder and its missing parents, flushed to the disk. Nothing to do if it is there; an Error if
// something else is.
Result<void> ensure_directory(const std::filesystem::path& path);

// Errno as an Error about a path: "<path>: <problem>: "<system's words>". <remedy>".
Error file_error(const std::filesystem::path& path, const char* problem, int error_number);

}  // namespace nightweigh::platform

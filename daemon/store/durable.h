// The few file operations of the store that must survive a power cut.
#pragma once

#include <filesystem>

#include "daemon/domain/result.h"

namespace nightweigh::store {

// Flushes the file's bytes, moves it over `to` (same folder), flushes the folder.
Result<void> rename_durably(const std::filesystem::path& from, const std::filesystem::path& to);

// The last error of the system (errno) as an Error of kind storage about `path`.
Error system_error(const std::filesystem::path& path, const char* problem, int error_number);

}  // namespace nightweigh::store

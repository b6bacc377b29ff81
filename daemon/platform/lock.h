// One process at a time works in a data folder.
#pragma once

#include <filesystem>

#include "daemon/domain/result.h"
#include "daemon/platform/descriptor.h"

namespace nightweigh::platform {

// Holds an exclusive flock(2) on <folder>/lock while it lives. The kernel gives the lock back when the
// process ends, however it ends, so a lock is never stale; the file itself stays. Its content, the holder's
// process id, is for people and messages only. Two objects exclude each other also within one process.
// flock does not work between machines on every network file system: keep the folder on a local disk.
class DirectoryLock {
 public:
  // busy: another process has it (the message names its id). not_found, storage: the file cannot be made.
  static Result<DirectoryLock> take(const std::filesystem::path& folder);

  DirectoryLock(DirectoryLock&&) noexcept = default;
  DirectoryLock& operator=(DirectoryLock&&) = delete;
  ~DirectoryLock();

 private:
  explicit DirectoryLock(Descriptor descriptor) : descriptor_(std::move(descriptor)) {}

  Descriptor descriptor_;
};

}  // namespace nightweigh::platform

#include "daemon/platform/lock.h"

#include <fcntl.h>
#include <sys/file.h>
#include <unistd.h>

#include <algorithm>
#include <array>
#include <cerrno>
#include <string>
#include <utility>

#include "daemon/platform/files.h"

namespace nightweigh::platform {

namespace {

// The id that the holder wrote; empty while it has not yet.
std::string holder_in(const Descriptor& descriptor) {
  std::array<char, 24> text{};
  const ssize_t size = ::pread(descriptor.number(), text.data(), text.size(), 0);
  std::string id(text.data(), size > 0 ? static_cast<std::size_t>(size) : 0);
  const auto no_digit = [](char c) { return c < '0' || c > '9'; };
  id.erase(std::find_if(id.begin(), id.end(), no_digit), id.end());
  return id;
}

int take_without_waiting(const Descriptor& descriptor) {
  int status = 0;
  do {
    status = ::flock(descriptor.number(), LOCK_EX | LOCK_NB);
  } while (status != 0 && errno == EINTR);
  return status;
}

}  // namespace

Result<DirectoryLock> DirectoryLock::take(const std::filesystem::path& folder) {
  const std::filesystem::path file = folder / "lock";
  Descriptor descriptor(::open(file.c_str(), O_RDWR | O_CREAT | O_NOFOLLOW | O_NONBLOCK | O_CLOEXEC, 0644));
  if (!descriptor) return failure(file_error(file, "the lock file cannot be opened", errno));
  if (take_without_waiting(descriptor) != 0) {
    if (errno != EWOULDBLOCK) return failure(file_error(file, "the folder cannot be locked", errno));
    const std::string holder = holder_in(descriptor);
    const std::string who = holder.empty() ? "another process" : "process " + holder;
    return failure(Error{ErrorKind::busy, shown(folder.string(), 400), who + " is working in this folder", "",
                         "stop it first, or use another data_dir"});
  }
  // The lock holds without the id; a full disk must not keep the service from starting.
  const std::string id = std::to_string(::getpid()) + "\n";
  if (::ftruncate(descriptor.number(), 0) == 0) {
    [[maybe_unused]] const ssize_t written = ::pwrite(descriptor.number(), id.data(), id.size(), 0);
  }
  return DirectoryLock(std::move(descriptor));
}

DirectoryLock::~DirectoryLock() {
  if (!descriptor_) return;
  [[maybe_unused]] const int emptied = ::ftruncate(descriptor_.number(), 0);
  // Explicitly: a child made by fork shares the open file and would keep the lock.
  ::flock(descriptor_.number(), LOCK_UN);
}

}  // namespace nightweigh::platform

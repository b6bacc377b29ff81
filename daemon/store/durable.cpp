#include "daemon/store/durable.h"

#include <fcntl.h>
#include <unistd.h>

#include <cerrno>
#include <cstdio>
#include <string>
#include <system_error>

namespace nightweigh::store {

namespace {

// A file or a folder.
Result<void> flush(const std::filesystem::path& path) {
  const int descriptor = ::open(path.c_str(), O_RDONLY | O_CLOEXEC);
  if (descriptor < 0) return failure(system_error(path, "cannot be opened to be flushed to disk", errno));
  const int status = ::fsync(descriptor);
  const int error_number = errno;
  ::close(descriptor);
  if (status != 0) return failure(system_error(path, "cannot be flushed to disk", error_number));
  return {};
}

}  // namespace

Error system_error(const std::filesystem::path& path, const char* problem, int error_number) {
  return {ErrorKind::storage, path.string(), problem, std::generic_category().message(error_number),
          "check the disk's free space and the rights of the service's user on the file and its folder"};
}

Result<void> rename_durably(const std::filesystem::path& from, const std::filesystem::path& to) {
  if (Result<void> flushed = flush(from); !flushed) return flushed;
  if (std::rename(from.c_str(), to.c_str()) != 0) {
    return failure(system_error(to, "cannot be put in place", errno));
  }
  return flush(to.has_parent_path() ? to.parent_path() : std::filesystem::path("."));
}

}  // namespace nightweigh::store

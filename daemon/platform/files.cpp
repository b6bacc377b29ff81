#include "daemon/platform/files.h"

#include <fcntl.h>
#include <sys/stat.h>
#include <unistd.h>

#include <algorithm>
#include <atomic>
#include <cerrno>
#include <cstdio>
#include <system_error>
#include <utility>

#include "daemon/platform/descriptor.h"

namespace nightweigh::platform {

namespace {

namespace fs = std::filesystem;

fs::path folder_of(const fs::path& path) {
  return path.has_parent_path() ? path.parent_path() : fs::path(".");
}

const char* remedy_for(int error_number) {
  switch (error_number) {
    case ENOENT:
      return "check the path's spelling";
    case EACCES:
    case EPERM:
      return "give the service's user the rights it needs on the file and its folder";
    case EROFS:
      return "the file system is mounted for reading only; use another folder";
    case ENOSPC:
    case EDQUOT:
      return "free space on the disk";
    case EFBIG:
      return "raise the process's file size limit";
    case ENOTDIR:
    case EEXIST:
      return "something else has the name of the folder; move it away or use another path";
    case EISDIR:
      return "name a file, not a folder";
    case ENAMETOOLONG:
      return "use a shorter name";
    case EMFILE:
    case ENFILE:
      return "too many files are open; raise the limit of open files";
    case ELOOP:
      return "the links point at each other; name the file itself";
    default:
      return "see the system's log";
  }
}

// 0 or an errno.
int write_all(int descriptor, std::string_view bytes) {
  while (!bytes.empty()) {
    const ssize_t written = ::write(descriptor, bytes.data(), bytes.size());
    if (written < 0) {
      if (errno == EINTR) continue;
      return errno;
    }
    bytes.remove_prefix(static_cast<std::size_t>(written));
  }
  return 0;
}

Result<void> flush_folder(const fs::path& folder) {
  const Descriptor descriptor(::open(folder.c_str(), O_RDONLY | O_DIRECTORY | O_CLOEXEC));
  if (!descriptor) return failure(file_error(folder, "the folder cannot be opened", errno));
  if (::fsync(descriptor.number()) != 0) {
    return failure(file_error(folder, "the folder cannot be flushed to the disk", errno));
  }
  return {};
}

// A new file beside `path`; its own path comes back in `temporary`.
Descriptor make_temporary(const fs::path& path, mode_t mode, fs::path& temporary) {
  static std::atomic<unsigned> counter{0};
  while (true) {
    std::string name(".");
    name.append(path.filename().string()).append(".").append(std::to_string(::getpid()));
    name.append("-").append(std::to_string(counter++)).append(".tmp");
    temporary = folder_of(path) / name;
    Descriptor descriptor(
        ::open(temporary.c_str(), O_WRONLY | O_CREAT | O_EXCL | O_NOFOLLOW | O_CLOEXEC, mode));
    // Names left by a killed process that had our id are passed over.
    if (descriptor || errno != EEXIST) return descriptor;
  }
}

// 0 or an errno. Closes the descriptor.
int fill(Descriptor descriptor, std::string_view bytes) {
  if (const int error_number = write_all(descriptor.number(), bytes); error_number != 0) return error_number;
  if (::fsync(descriptor.number()) != 0) return errno;
  return descriptor.close();
}

}  // namespace

Error file_error(const fs::path& path, const char* problem, int error_number) {
  const ErrorKind kind = error_number == ENOENT ? ErrorKind::not_found : ErrorKind::storage;
  return {kind, shown(path.string(), 400), problem, std::generic_category().message(error_number),
          remedy_for(error_number)};
}

Result<std::string> read_file(const fs::path& path, std::size_t bytes_max) {
  // O_NONBLOCK: opening a pipe without a writer would wait.
  const Descriptor descriptor(::open(path.c_str(), O_RDONLY | O_NONBLOCK | O_NOCTTY | O_CLOEXEC));
  if (!descriptor) return failure(file_error(path, "cannot be opened for reading", errno));
  struct stat status = {};
  if (::fstat(descriptor.number(), &status) != 0)
    return failure(file_error(path, "cannot be looked at", errno));
  if (!S_ISREG(status.st_mode)) {
    return failure(Error{ErrorKind::bad_input, shown(path.string(), 400), "is no regular file",
                         S_ISDIR(status.st_mode) ? "a folder" : "a pipe, socket or device",
                         "name a regular file"});
  }
  const auto too_large = [&] {
    return failure(Error{ErrorKind::limit, shown(path.string(), 400),
                         "is larger than " + std::to_string(bytes_max) + " bytes", "",
                         "split it or make it smaller"});
  };
  const auto size = static_cast<std::size_t>(status.st_size);
  if (size > bytes_max) return too_large();
  // One byte more than is allowed shows that there is more.
  std::string bytes(std::min(size, bytes_max) + 1, '\0');
  std::size_t filled = 0;
  while (true) {
    const ssize_t got = ::read(descriptor.number(), bytes.data() + filled, bytes.size() - filled);
    if (got < 0) {
      if (errno == EINTR) continue;
      return failure(file_error(path, "cannot be read", errno));
    }
    if (got == 0) break;
    filled += static_cast<std::size_t>(got);
    if (filled > bytes_max) return too_large();
    if (filled == bytes.size()) bytes.resize(std::min(bytes_max, filled * 2) + 1);  // it grew meanwhile
  }
  bytes.resize(filled);
  return bytes;
}

Result<void> write_file_atomically(const fs::path& path, std::string_view bytes, unsigned mode) {
  if (!path.has_filename()) return failure(file_error(path, "cannot be written", EISDIR));
  fs::path temporary;
  Descriptor descriptor = make_temporary(path, static_cast<mode_t>(mode), temporary);
  if (!descriptor)
    return failure(file_error(path, "cannot be written: no new file can be made in its folder", errno));
  int error_number = fill(std::move(descriptor), bytes);
  if (error_number == 0 && ::rename(temporary.c_str(), path.c_str()) != 0) error_number = errno;
  if (error_number != 0) {
    ::unlink(temporary.c_str());
    return failure(file_error(path, "cannot be written", error_number));
  }
  return flush_folder(folder_of(path));
}

Result<void> rename_durably(const fs::path& from, const fs::path& to) {
  {
    const Descriptor descriptor(::open(from.c_str(), O_RDONLY | O_CLOEXEC));
    if (!descriptor || ::fsync(descriptor.number()) != 0) {
      return failure(file_error(from, "cannot be flushed to the disk", errno));
    }
  }
  if (::rename(from.c_str(), to.c_str()) != 0)
    return failure(file_error(to, "cannot be put in place", errno));
  return flush_folder(folder_of(to));
}

Result<void> ensure_directory(const fs::path& path) {
  std::error_code error;
  if (fs::is_directory(path, error)) return {};
  if (path.empty()) return failure(file_error(path, "the folder cannot be made", ENOENT));
  // "a/b/" is "a/b".
  const fs::path folder = path.has_filename() ? path : path.parent_path();
  if (folder.has_parent_path() && folder.parent_path() != folder) {
    if (Result<void> parent = ensure_directory(folder.parent_path()); !parent) return parent;
  }
  // EEXIST: somebody made it in the same moment, or something else has its name.
  if (::mkdir(folder.c_str(), 0777) != 0 && !(errno == EEXIST && fs::is_directory(folder, error))) {
    return failure(file_error(folder, "the folder cannot be made", errno));
  }
  return flush_folder(folder_of(folder));
}

}  // namespace nightweigh::platform

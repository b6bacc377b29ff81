#include "daemon/feed/drop_files.h"

#include <dirent.h>
#include <fcntl.h>
#include <unistd.h>

#include <algorithm>
#include <cerrno>
#include <csignal>
#include <cstdio>
#include <cstring>
#include <system_error>
#include <utility>

namespace nightweigh::feed {

namespace {

namespace fs = std::filesystem;

std::string reason_of(int error_number) {
  return std::generic_category().message(error_number);
}

class Descriptor {
 public:
  explicit Descriptor(int number) : number_(number) {}
  ~Descriptor() {
    if (number_ >= 0) ::close(number_);
  }
  Descriptor(const Descriptor&) = delete;
  Descriptor& operator=(const Descriptor&) = delete;
  int number() const { return number_; }

 private:
  int number_;
};

// Linux grants a read lease only while nobody has the file open for writing, and keeps a writer waiting in
// open() until it is given back.
class ReadLease {
 public:
  explicit ReadLease(int descriptor) : descriptor_(descriptor) {
    // A writer that wants in is announced by a signal: one that is ignored by default, for the usual SIGIO
    // would end the process.
    if (::fcntl(descriptor_, F_SETSIG, SIGURG) != 0) return;
    held_ = ::fcntl(descriptor_, F_SETLEASE, F_RDLCK) == 0;
    writer_ = !held_ && errno == EAGAIN;
  }
  ~ReadLease() {
    if (held_) ::fcntl(descriptor_, F_SETLEASE, F_UNLCK);
  }
  ReadLease(const ReadLease&) = delete;
  ReadLease& operator=(const ReadLease&) = delete;
  bool somebody_writes() const { return writer_; }

 private:
  int descriptor_;
  bool held_ = false;
  bool writer_ = false;
};

bool ends_with(std::string_view text, std::string_view end) {
  return text.size() >= end.size() && text.substr(text.size() - end.size()) == end;
}

bool is_there(const fs::path& path) {
  struct stat status {};
  return ::lstat(path.c_str(), &status) == 0;
}

// rename() that fails with EEXIST instead of overwriting. 0 or an error number.
int rename_without_overwriting(const fs::path& from, const fs::path& to) {
  if (::renameat2(AT_FDCWD, from.c_str(), AT_FDCWD, to.c_str(), RENAME_NOREPLACE) == 0) return 0;
  if (errno != EINVAL && errno != ENOSYS) return errno;
  // A file system without that call: nobody else writes into these folders, so looking first is enough.
  if (is_there(to)) return EEXIST;
  return ::rename(from.c_str(), to.c_str()) == 0 ? 0 : errno;
}

// Written beside and renamed, so that a reader sees all or nothing: 0 or an error number. Not synced: the
// network thread does not wait for the disk for a text that the log has too.
int write_whole(const fs::path& path, std::string_view text) {
  const fs::path temporary = path.parent_path() / ("." + path.filename().string());
  {
    const Descriptor file(
        ::open(temporary.c_str(), O_WRONLY | O_CREAT | O_TRUNC | O_CLOEXEC | O_NOFOLLOW, 0644));
    if (file.number() < 0) return errno;
    while (!text.empty()) {
      const ssize_t put = ::write(file.number(), text.data(), text.size());
      if (put < 0 && errno == EINTR) continue;
      if (put < 0) {
        const int error_number = errno;
        ::unlink(temporary.c_str());
        return error_number;
      }
      text.remove_prefix(static_cast<std::size_t>(put));
    }
  }
  if (::rename(temporary.c_str(), path.c_str()) == 0) return 0;
  const int error_number = errno;
  ::unlink(temporary.c_str());
  return error_number;
}

fs::path reason_path(const fs::path& folder, const std::string& name) {
  return folder / (name + ".reason.txt");
}

// "a.csv", "a-2.csv", "a-3.csv", ...; a name near the file system's limit is cut to leave room for what is
// put behind it.
std::string numbered(const std::string& name, int number) {
  constexpr std::size_t name_bytes_max = 200;
  const std::size_t point = name.rfind('.');
  const bool has_extension = point != std::string::npos && point > 0 && name.size() - point <= 16;
  const std::string extension = has_extension ? name.substr(point) : std::string();
  std::string stem = name.substr(0, name.size() - extension.size());
  if (stem.size() > name_bytes_max) stem.resize(name_bytes_max);
  if (number > 1) stem += "-" + std::to_string(number);
  return stem + extension;
}

}  // namespace

FileState state_of(const struct stat& status) {
  return {static_cast<std::uint64_t>(status.st_dev), static_cast<std::uint64_t>(status.st_ino),
          static_cast<std::int64_t>(status.st_size),
          static_cast<std::int64_t>(status.st_mtim.tv_sec) * 1'000'000'000 + status.st_mtim.tv_nsec};
}

std::optional<FileState> look_at(const fs::path& path) {
  struct stat status {};
  if (::lstat(path.c_str(), &status) != 0 || !S_ISREG(status.st_mode)) return std::nullopt;
  return state_of(status);
}

Result<std::vector<std::string>> list_names(const fs::path& folder) {
  DIR* const stream = ::opendir(folder.c_str());
  const auto storage_error = [&](int error_number) {
    return failure({ErrorKind::storage, "drop folder " + shown(folder.string()), "cannot be read",
                    reason_of(error_number),
                    "See that the folder exists and the service's user may read it"});
  };
  if (stream == nullptr) return storage_error(errno);
  std::vector<std::string> names;
  int error_number = 0;
  for (;;) {
    errno = 0;
    const dirent* const entry = ::readdir(stream);  // one stream, one thread
    if (entry == nullptr) {
      error_number = errno;
      break;
    }
    // Folders are many file systems' only entries whose kind is known here; look_at() sees the rest.
    if (entry->d_type == DT_DIR) continue;
    const std::string_view name = entry->d_name;
    if (name.front() == '.' || ends_with(name, ".part") || ends_with(name, ".tmp")) continue;
    names.emplace_back(name);
  }
  ::closedir(stream);
  if (error_number != 0) return storage_error(error_number);
  std::sort(names.begin(), names.end());
  return names;
}

ReadFile read_file(const fs::path& path, std::size_t bytes_max) {
  ReadFile out;
  // O_NONBLOCK: should the name have become a pipe since it was looked at, open() must not wait for a writer.
  const Descriptor file(::open(path.c_str(), O_RDONLY | O_NONBLOCK | O_NOFOLLOW | O_CLOEXEC));
  if (file.number() < 0) {
    out.outcome = errno == ENOENT || errno == ELOOP ? ReadFile::Outcome::gone : ReadFile::Outcome::failed;
    out.problem = reason_of(errno);
    return out;
  }
  struct stat status {};
  if (::fstat(file.number(), &status) != 0) {
    out.problem = reason_of(errno);
    return out;
  }
  if (!S_ISREG(status.st_mode)) {
    out.outcome = ReadFile::Outcome::gone;
    return out;
  }
  const ReadLease lease(file.number());
  if (lease.somebody_writes()) {
    out.outcome = ReadFile::Outcome::busy;
    return out;
  }
  // Again, now that nobody can write.
  if (::fstat(file.number(), &status) != 0) {
    out.problem = reason_of(errno);
    return out;
  }
  out.state = state_of(status);
  if (static_cast<std::uint64_t>(status.st_size) > bytes_max) {
    out.outcome = ReadFile::Outcome::too_large;
    return out;
  }
  // One byte more than its size shows a file that grew.
  out.bytes.resize(static_cast<std::size_t>(status.st_size) + 1);
  std::size_t filled = 0;
  while (filled < out.bytes.size()) {
    const ssize_t got = ::read(file.number(), out.bytes.data() + filled, out.bytes.size() - filled);
    if (got < 0 && errno == EINTR) continue;
    if (got < 0) {
      out.problem = reason_of(errno);
      return out;
    }
    if (got == 0) break;
    filled += static_cast<std::size_t>(got);
  }
  out.bytes.resize(filled);
  if (::fstat(file.number(), &status) != 0 || !(state_of(status) == out.state) ||
      static_cast<std::int64_t>(filled) != out.state.size) {
    out.outcome = ReadFile::Outcome::busy;
    return out;
  }
  out.outcome = ReadFile::Outcome::read;
  return out;
}

Result<std::string> move_into(const fs::path& path, const FileState& state, const fs::path& folder,
                              const std::string& reason) {
  const auto storage_error = [&](int error_number) {
    return failure({ErrorKind::storage, shown(path.string()),
                    "cannot be moved into " + shown(folder.string()), reason_of(error_number),
                    "See that the service's user may write there and that the disk has room"});
  };
  const auto replaced = [&] {
    return failure({ErrorKind::conflict, shown(path.string()), "changed after it was read", "",
                    "It is read again; rename finished files into the folder under new names"});
  };
  std::error_code ec;
  fs::create_directories(folder, ec);
  if (ec) return storage_error(ec.value());

  const std::string plain = path.filename().string();
  constexpr int numbers_max = 1'000'000;
  for (int number = 1; number <= numbers_max; ++number) {
    const std::string name = numbered(plain, number);
    if (is_there(folder / name) || is_there(reason_path(folder, name))) continue;
    const std::optional<FileState> now = look_at(path);
    if (!now || !(*now == state)) return replaced();
    if (!reason.empty()) {
      if (const int error_number = write_whole(reason_path(folder, name), reason))
        return storage_error(error_number);
    }
    const int error_number = rename_without_overwriting(path, folder / name);
    if (error_number != 0 && !reason.empty()) ::unlink(reason_path(folder, name).c_str());
    if (error_number == EEXIST) continue;
    if (error_number != 0) return storage_error(error_number);
    // A new file may have taken the name between the last look and the move: it goes back.
    const std::optional<FileState> moved = look_at(folder / name);
    if (moved && !(*moved == state) && rename_without_overwriting(folder / name, path) == 0) {
      if (!reason.empty()) ::unlink(reason_path(folder, name).c_str());
      return replaced();
    }
    return name;
  }
  return storage_error(EEXIST);
}

}  // namespace nightweigh::feed

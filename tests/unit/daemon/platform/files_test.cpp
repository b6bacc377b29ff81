// Whole files, read with a limit and written at once.
#include "daemon/platform/files.h"

#include <doctest/doctest.h>
#include <signal.h>
#include <stdlib.h>
#include <sys/resource.h>
#include <sys/stat.h>
#include <sys/wait.h>
#include <unistd.h>

#include <atomic>
#include <fstream>
#include <iterator>
#include <set>
#include <system_error>
#include <thread>

namespace nightweigh::platform {
namespace {

namespace fs = std::filesystem;

class Folder {
 public:
  Folder() {
    std::string name = (fs::temp_directory_path() / "nightweigh-files-XXXXXX").string();
    REQUIRE(::mkdtemp(name.data()) != nullptr);
    path_ = name;
  }
  ~Folder() {
    std::error_code ignored;
    fs::remove_all(path_, ignored);
  }
  Folder(const Folder&) = delete;
  Folder& operator=(const Folder&) = delete;

  fs::path operator/(const std::string& name) const { return path_ / name; }
  const fs::path& path() const { return path_; }
  std::set<std::string> names() const {
    std::set<std::string> all;
    for (const auto& entry : fs::directory_iterator(path_)) all.insert(entry.path().filename());
    return all;
  }

 private:
  fs::path path_;
};

std::string bytes_of(const fs::path& file) {
  std::ifstream in(file, std::ios::binary);
  return std::string(std::istreambuf_iterator<char>(in), {});
}

template <class T>
Error error_of(const Result<T>& result, const fs::path& path) {
  REQUIRE_FALSE(result);
  INFO(result.error().message());
  CHECK(result.error().place.find(path.string()) != std::string::npos);
  CHECK_FALSE(result.error().problem.empty());
  CHECK_FALSE(result.error().remedy.empty());
  return result.error();
}

}  // namespace

TEST_CASE("what is written is read, byte for byte") {
  const Folder folder;
  std::string all;
  for (int i = 0; i < 300000; ++i) all += static_cast<char>(i % 251);
  for (const std::string& bytes : {std::string(), std::string("\0\n\r\xff", 4), all}) {
    REQUIRE(write_file_atomically(folder / "a.bin", bytes));
    const Result<std::string> read = read_file(folder / "a.bin", bytes.size());  // exactly the limit
    REQUIRE(read);
    CHECK(*read == bytes);
    CHECK(read_file(folder / "a.bin", 1'000'000'000).value() == bytes);
    CHECK(folder.names() == std::set<std::string>{"a.bin"});  // no temporary file stays
  }
  CHECK(error_of(read_file(folder / "a.bin", all.size() - 1), folder / "a.bin").kind == ErrorKind::limit);
  CHECK(error_of(read_file(folder / "a.bin", 0), folder / "a.bin").problem == "is larger than 0 bytes");
}

TEST_CASE("only regular files are read, and nothing is waited for") {
  const Folder folder;
  Error error = error_of(read_file(folder / "none", 10), folder / "none");
  CHECK(error.kind == ErrorKind::not_found);
  CHECK(error.value == "No such file or directory");
  CHECK(error_of(read_file(folder.path(), 10), folder.path()).kind == ErrorKind::bad_input);
  REQUIRE(::mkfifo((folder / "pipe").c_str(), 0600) == 0);
  CHECK(error_of(read_file(folder / "pipe", 10), folder / "pipe").kind == ErrorKind::bad_input);
  CHECK(error_of(read_file("/dev/zero", 10), "/dev/zero").kind == ErrorKind::bad_input);
  REQUIRE(write_file_atomically(folder / "a", "x"));
  CHECK(error_of(read_file(folder / "a/b", 10), folder / "a/b").value == "Not a directory");
  fs::create_symlink(folder / "a", folder / "link");
  CHECK(read_file(folder / "link", 10).value() == "x");
  fs::create_symlink(folder / "round", folder / "round");
  CHECK(error_of(read_file(folder / "round", 10), folder / "round").kind == ErrorKind::storage);
}

TEST_CASE("a file that grows without end is refused at the limit") {
  // Of files in /proc the size is said to be 0, but there are bytes to read.
  CHECK(read_file("/proc/self/stat", 100000).value().size() > 10);
  CHECK(error_of(read_file("/proc/self/stat", 5), "/proc/self/stat").kind == ErrorKind::limit);
}

TEST_CASE("a reader sees the old or the new file, never a part") {
  const Folder folder;
  const std::string a(200000, 'a');
  const std::string b(100000, 'b');
  REQUIRE(write_file_atomically(folder / "f", a));
  std::atomic<bool> done{false};
  std::atomic<int> wrong{0};
  std::atomic<int> seen{0};
  std::thread reader([&] {
    while (!done) {
      const Result<std::string> read = read_file(folder / "f", 1'000'000);
      if (!read || (*read != a && *read != b)) ++wrong;
      ++seen;
    }
  });
  for (int i = 0; i < 60; ++i) CHECK(write_file_atomically(folder / "f", i % 2 == 0 ? b : a));
  done = true;
  reader.join();
  CHECK(wrong == 0);
  CHECK(seen > 0);
}

TEST_CASE("a write that fails leaves the old file and nothing else") {
  const Folder folder;
  REQUIRE(write_file_atomically(folder / "f", "old"));
  struct rlimit before = {};
  REQUIRE(::getrlimit(RLIMIT_FSIZE, &before) == 0);
  const auto handler = ::signal(SIGXFSZ, SIG_IGN);
  struct rlimit small = before;
  small.rlim_cur = 1000;
  REQUIRE(::setrlimit(RLIMIT_FSIZE, &small) == 0);
  const Result<void> refused = write_file_atomically(folder / "f", std::string(5000, 'n'));
  REQUIRE(::setrlimit(RLIMIT_FSIZE, &before) == 0);
  ::signal(SIGXFSZ, handler);
  CHECK(error_of(refused, folder / "f").kind == ErrorKind::storage);
  CHECK(bytes_of(folder / "f") == "old");
  CHECK(folder.names() == std::set<std::string>{"f"});

  // A folder has the name: nothing is put in its place.
  fs::create_directory(folder / "folder");
  CHECK(error_of(write_file_atomically(folder / "folder", "x"), folder / "folder").value == "Is a directory");
  CHECK(folder.names() == std::set<std::string>{"f", "folder"});
  CHECK(error_of(write_file_atomically(folder / "none/f", "x"), folder / "none/f").kind ==
        ErrorKind::not_found);
  CHECK_FALSE(write_file_atomically(folder / std::string(255, 'n'), "x"));
  CHECK_FALSE(write_file_atomically(folder / "", "x"));
  CHECK_FALSE(write_file_atomically("", "x"));
}

TEST_CASE("rights of a written file") {
  const Folder folder;
  REQUIRE(write_file_atomically(folder / "mine", "x", 0600));
  struct stat status = {};
  REQUIRE(::stat((folder / "mine").c_str(), &status) == 0);
  CHECK((status.st_mode & 0777U) == 0600);
  const mode_t mask = ::umask(0027);
  REQUIRE(write_file_atomically(folder / "ours", "x"));
  ::umask(mask);
  REQUIRE(::stat((folder / "ours").c_str(), &status) == 0);
  CHECK((status.st_mode & 0777U) == 0640);
}

TEST_CASE("folders are made with their parents, once") {
  const Folder folder;
  CHECK(ensure_directory(folder / "a/b/c"));
  CHECK(fs::is_directory(folder / "a/b/c"));
  CHECK(ensure_directory(folder / "a/b/c"));
  CHECK(ensure_directory(folder / "a/b/d/"));
  CHECK(fs::is_directory(folder / "a/b/d"));
  CHECK(ensure_directory("/"));
  CHECK(ensure_directory("."));
  fs::create_directory_symlink(folder / "a", folder / "link");
  CHECK(ensure_directory(folder / "link/e"));
  CHECK(fs::is_directory(folder / "a/e"));
  REQUIRE(write_file_atomically(folder / "f", "x"));
  CHECK(error_of(ensure_directory(folder / "f"), folder / "f").value == "File exists");
  CHECK(error_of(ensure_directory(folder / "f/g"), folder / "f").kind == ErrorKind::storage);
  CHECK(bytes_of(folder / "f") == "x");
  CHECK_FALSE(ensure_directory(""));
}

TEST_CASE("a folder that may not be written") {
  const Folder folder;
  ::chmod(folder.path().c_str(), 0555);
  // The super-user may write everywhere, so a child without its rights tries.
  const pid_t child = ::fork();
  REQUIRE(child >= 0);
  if (child == 0) {
    if (::geteuid() == 0 && (::setresgid(65534, 65534, 65534) != 0 || ::setresuid(65534, 65534, 65534) != 0))
      ::_exit(9);
    const Result<void> written = write_file_atomically(folder / "f", "x");
    const Result<void> made = ensure_directory(folder / "d");
    const bool said = !written && written.error().value == "Permission denied" && !made &&
                      made.error().value == "Permission denied" &&
                      written.error().remedy.find("rights") != std::string::npos;
    ::_exit(said ? 0 : 1);
  }
  int status = -1;
  REQUIRE(::waitpid(child, &status, 0) == child);
  CHECK(status == 0);
  ::chmod(folder.path().c_str(), 0755);
  CHECK(folder.names().empty());
}

}  // namespace nightweigh::platform

// One process a folder.
#include "daemon/platform/lock.h"

#include <doctest/doctest.h>
#include <fcntl.h>
#include <signal.h>
#include <stdlib.h>
#include <sys/wait.h>
#include <unistd.h>

#include <array>
#include <fstream>
#include <optional>
#include <string>
#include <system_error>
#include <utility>

namespace nightweigh::platform {
namespace {

namespace fs = std::filesystem;

struct Folder {
  Folder() {
    std::string name = (fs::temp_directory_path() / "nightweigh-lock-XXXXXX").string();
    REQUIRE(::mkdtemp(name.data()) != nullptr);
    path = name;
  }
  ~Folder() {
    std::error_code ignored;
    fs::remove_all(path, ignored);
  }
  fs::path path;
};

std::string first_line(const fs::path& file) {
  std::ifstream in(file);
  std::string line;
  std::getline(in, line);
  return line;
}

// A child that holds the lock until it is killed.
pid_t child_that_holds(const fs::path& folder) {
  std::array<int, 2> ends{};
  REQUIRE(::pipe(ends.data()) == 0);
  const pid_t child = ::fork();
  REQUIRE(child >= 0);
  if (child == 0) {
    const auto lock = DirectoryLock::take(folder);
    const char answer = lock ? 'y' : 'n';
    if (::write(ends[1], &answer, 1) != 1) ::_exit(1);
    while (true) ::pause();
  }
  char answer = '?';
  CHECK(::read(ends[0], &answer, 1) == 1);
  CHECK(answer == 'y');
  ::close(ends[0]);
  ::close(ends[1]);
  return child;
}

}  // namespace

TEST_CASE("a second taker is told who has the folder") {
  const Folder folder;
  {
    const Result<DirectoryLock> lock = DirectoryLock::take(folder.path);
    REQUIRE(lock);
    CHECK(first_line(folder.path / "lock") == std::to_string(::getpid()));
    const Result<DirectoryLock> second = DirectoryLock::take(folder.path);
    REQUIRE_FALSE(second);
    CHECK(second.error().kind == ErrorKind::busy);
    CHECK(second.error().place == folder.path.string());
    CHECK(second.error().problem == "process " + std::to_string(::getpid()) + " is working in this folder");
    CHECK_FALSE(second.error().remedy.empty());
    CHECK_FALSE(DirectoryLock::take(folder.path));  // a refused taker takes nothing away
  }
  CHECK(fs::file_size(folder.path / "lock") == 0);
  CHECK(DirectoryLock::take(folder.path));
}

TEST_CASE("a moved lock is held once, and released once") {
  const Folder folder;
  std::optional<DirectoryLock> outer;
  {
    Result<DirectoryLock> inner = DirectoryLock::take(folder.path);
    REQUIRE(inner);
    outer.emplace(std::move(*inner));
  }
  CHECK_FALSE(DirectoryLock::take(folder.path));
  outer.reset();
  CHECK(DirectoryLock::take(folder.path));
}

TEST_CASE("a killed holder leaves no lock") {
  const Folder folder;
  const pid_t child = child_that_holds(folder.path);
  const Result<DirectoryLock> refused = DirectoryLock::take(folder.path);
  REQUIRE_FALSE(refused);
  CHECK(refused.error().problem == "process " + std::to_string(child) + " is working in this folder");
  ::kill(child, SIGKILL);
  REQUIRE(::waitpid(child, nullptr, 0) == child);
  CHECK(first_line(folder.path / "lock") == std::to_string(child));  // left, and of no weight
  CHECK(DirectoryLock::take(folder.path));
}

TEST_CASE("children keep nothing locked") {
  const Folder folder;
  pid_t child = -1;
  {
    const Result<DirectoryLock> lock = DirectoryLock::take(folder.path);
    REQUIRE(lock);
    child = ::fork();  // shares the open file
    REQUIRE(child >= 0);
    if (child == 0) {
      while (true) ::pause();
    }
  }
  CHECK(DirectoryLock::take(folder.path));
  ::kill(child, SIGKILL);
  ::waitpid(child, nullptr, 0);
}

TEST_CASE("strange lock files") {
  const Folder folder;
  std::ofstream(folder.path / "lock") << "an old, long text that somebody wrote by hand\nand more";
  CHECK(DirectoryLock::take(folder.path));
  fs::remove(folder.path / "lock");

  const Result<DirectoryLock> nowhere = DirectoryLock::take(folder.path / "none");
  REQUIRE_FALSE(nowhere);
  CHECK(nowhere.error().kind == ErrorKind::not_found);
  CHECK(nowhere.error().place == (folder.path / "none/lock").string());
  fs::create_directory(folder.path / "lock");
  CHECK(DirectoryLock::take(folder.path).error().kind == ErrorKind::storage);
  fs::remove(folder.path / "lock");
  // A link could lead the process id over another file.
  std::ofstream(folder.path / "precious") << "kept";
  fs::create_symlink(folder.path / "precious", folder.path / "lock");
  CHECK_FALSE(DirectoryLock::take(folder.path));
  CHECK(first_line(folder.path / "precious") == "kept");
}

}  // namespace nightweigh::platform

// Opening: a new database, an old friend, and everything that is neither.
#include <SQLiteCpp/Database.h>
#include <SQLiteCpp/Statement.h>
#include <doctest/doctest.h>
#include <sqlite3.h>
#include <sys/stat.h>
#include <sys/wait.h>
#include <unistd.h>

#include <array>
#include <chrono>
#include <filesystem>

#include "daemon/store/schema.h"
#include "tests/unit/daemon/store/folder.h"
#include "tests/unit/daemon/store/samples.h"

namespace nightweigh::store {
namespace {

namespace fs = std::filesystem;

// A database with some pages in it, closed.
void fill(const fs::path& file) {
  const std::unique_ptr<Store> store = opened(file);
  std::vector<Close> closes;
  Date date = day_of("2020-01-01");
  for (int i = 0; i < 2000; ++i) closes.push_back({date.plus_days(i), "ALDER", 0, Decimal(1 + i), {}, {}});
  REQUIRE(store->store_batch(batch_of("many.csv", closes)));
  REQUIRE(store->append("harbour", "settings", std::string(20000, 'x')));
}

// What `work` says when it runs with the rights of nobody (the super-user may write everything).
template <class Work>
std::string as_nobody(Work work) {
  std::array<int, 2> ends{};
  REQUIRE(::pipe(ends.data()) == 0);
  const pid_t child = ::fork();
  if (child == 0) {
    if (::geteuid() == 0 && (::setresgid(65534, 65534, 65534) != 0 || ::setresuid(65534, 65534, 65534) != 0))
      ::_exit(1);
    const std::string said = work();
    ::_exit(::write(ends[1], said.data(), said.size()) == static_cast<ssize_t>(said.size()) ? 0 : 1);
  }
  ::close(ends[1]);
  std::string said;
  std::array<char, 512> piece{};
  for (ssize_t got = 0; (got = ::read(ends[0], piece.data(), piece.size())) > 0;) {
    said.append(piece.data(), static_cast<std::size_t>(got));
  }
  ::close(ends[0]);
  int status = -1;
  ::waitpid(child, &status, 0);
  CHECK(status == 0);
  return said;
}

std::string said_by_open(const fs::path& file, Store::Mode mode) {
  const Result<std::unique_ptr<Store>> store = Store::open(file, mode);
  return store ? "opened" : std::string(name_of(store.error().kind)) + ": " + store.error().message();
}

}  // namespace

TEST_CASE("a new database is made whole and opens again") {
  const Folder folder;
  {
    const std::unique_ptr<Store> store = opened(folder.database());
    CHECK(value_of(store->books()).empty());
    CHECK(value_of(store->head("harbour")).sequence == 0);
    CHECK(value_of(store->head("harbour")).hash == std::string(64, '0'));
    REQUIRE(store->append("harbour", "settings", "{}"));
  }
  // A clean close leaves neither a log nor a temporary file.
  CHECK(folder.names() == std::set<std::string>{"nightweigh.db"});
  const std::unique_ptr<Store> store = opened(folder.database());
  CHECK(value_of(store->head("harbour")).sequence == 1);
  SQLite::Database plain(folder.database());
  CHECK(plain.execAndGet("PRAGMA journal_mode").getString() == "wal");
  CHECK(plain.execAndGet("PRAGMA application_id").getInt() == application_id);
  CHECK(plain.execAndGet("PRAGMA user_version").getInt() == newest_version(compiled_migrations()));
  CHECK(
      plain.execAndGet("SELECT count(*) FROM sqlite_schema WHERE type = 'table' AND sql NOT LIKE '%STRICT%'")
          .getInt() == 0);
}

TEST_CASE("a creation that was cut off is begun afresh") {
  const Folder folder;
  write_bytes(folder.path() / ".nightweigh.db.new", "half a database");
  write_bytes(folder.path() / ".nightweigh.db.new-journal", "and its journal");
  opened(folder.database());
  CHECK(folder.names() == std::set<std::string>{"nightweigh.db"});
}

TEST_CASE("a log without its database is not mixed into a new one") {
  const Folder folder;
  write_bytes(folder.path() / "nightweigh.db-wal", "pages");
  const Error error = refusal_of(folder.database());
  CHECK(error.kind == ErrorKind::corrupted);
  CHECK(error.value == "nightweigh.db-wal");
  CHECK(bytes_of(folder.path() / "nightweigh.db-wal") == "pages");
}

TEST_CASE("missing folder, missing database, a folder in its place") {
  const Folder folder;
  Error error = refusal_of(folder.path() / "none" / "nightweigh.db");
  CHECK(error.kind == ErrorKind::not_found);
  CHECK(has(error.message(), "none"));
  error = refusal_of(folder.database(), Store::Mode::read);
  CHECK(error.kind == ErrorKind::not_found);
  CHECK(folder.names().empty());  // reading makes nothing
  fs::create_directory(folder.database());
  CHECK(refusal_of(folder.database()).kind == ErrorKind::storage);
  CHECK(refusal_of(folder.database(), Store::Mode::read).kind == ErrorKind::storage);
}

TEST_CASE("a database from the future is refused, untouched, and names both versions") {
  const Folder folder;
  fill(folder.database());
  const int known = newest_version(compiled_migrations());
  SQLite::Database(folder.database(), SQLite::OPEN_READWRITE)
      .exec("PRAGMA user_version = " + std::to_string(known + 41));
  const std::string before = bytes_of(folder.database());
  for (const Store::Mode mode : {Store::Mode::write, Store::Mode::read}) {
    const Error error = refusal_of(folder.database(), mode);
    CHECK(error.kind == ErrorKind::storage);
    CHECK(has(error.problem, "version " + std::to_string(known + 41)));
    CHECK(has(error.problem, "up to " + std::to_string(known)));
    CHECK(has(error.remedy, "nightweigh release"));
  }
  CHECK(bytes_of(folder.database()) == before);
}

TEST_CASE("a migration applied with another text is refused") {
  const Folder folder;
  fill(folder.database());
  SQLite::Database(folder.database(), SQLite::OPEN_READWRITE)
      .exec("UPDATE schema_migrations SET sha256 = '" + std::string(64, 'a') + "'");
  const Error error = refusal_of(folder.database());
  CHECK(error.kind == ErrorKind::storage);
  CHECK(error.value == compiled_migrations().front().name);
}

TEST_CASE("another program's database is refused and untouched") {
  const Folder folder;
  SQLite::Database(folder.database(), SQLite::OPEN_READWRITE | SQLite::OPEN_CREATE)
      .exec("CREATE TABLE notes (text); INSERT INTO notes VALUES ('mine')");
  const std::string before = bytes_of(folder.database());
  const Error error = refusal_of(folder.database());
  CHECK(error.kind == ErrorKind::storage);
  CHECK(has(error.problem, "another program"));
  CHECK(bytes_of(folder.database()) == before);
  CHECK(folder.names() == std::set<std::string>{"nightweigh.db"});
}

TEST_CASE("text, noise and nothing are no databases; the file is kept") {
  const Folder folder;
  std::string noise;
  for (int i = 0; i < 100000; ++i) noise += static_cast<char>((i * 2654435761U) >> 13);
  for (const std::string& content : {std::string("date,instrument,close\n2026-03-02,ALDER,61.20\n"), noise,
                                     std::string("x"), std::string()}) {
    write_bytes(folder.database(), content);
    const Error error = refusal_of(folder.database());
    CHECK(error.kind == ErrorKind::corrupted);
    CHECK(has(error.remedy, "restore a backup"));
    CHECK(refusal_of(folder.database(), Store::Mode::read).kind == ErrorKind::corrupted);
    CHECK(bytes_of(folder.database()) == content);
  }
}

TEST_CASE("a truncated database is refused at every length") {
  const Folder folder;
  fill(folder.database());
  const std::string whole = bytes_of(folder.database());
  REQUIRE(whole.size() > 100000);
  // Inside the header, inside pages, at page boundaries, short of the end by a page and by a byte.
  for (const std::size_t length :
       {std::size_t{0}, std::size_t{1}, std::size_t{99}, std::size_t{100}, std::size_t{511},
        std::size_t{4095}, std::size_t{4096}, std::size_t{10000}, std::size_t{40960}, whole.size() / 2,
        whole.size() - 4096, whole.size() - 1}) {
    CAPTURE(length);
    write_bytes(folder.database(), whole.substr(0, length));
    const Error error = refusal_of(folder.database());
    CHECK(error.kind == ErrorKind::corrupted);
    CHECK(has(error.remedy, "restore a backup"));
    CHECK(bytes_of(folder.database()) == whole.substr(0, length));
  }
  write_bytes(folder.database(), whole);
  CHECK(value_of(opened(folder.database())->head("harbour")).sequence == 1);
}

TEST_CASE("a page of noise inside is found by the check at opening") {
  const Folder folder;
  fill(folder.database());
  const std::string whole = bytes_of(folder.database());
  std::string damaged = whole;
  // The root page of closes: its number stands in the schema.
  const int root = SQLite::Database(folder.database())
                       .execAndGet("SELECT rootpage FROM sqlite_schema WHERE name = 'closes'")
                       .getInt();
  for (int i = 0; i < 4096; ++i)
    damaged[static_cast<std::size_t>(root - 1) * 4096 + i] = static_cast<char>(i * 37 + 11);
  write_bytes(folder.database(), damaged);
  const Error error = refusal_of(folder.database());
  CHECK(error.kind == ErrorKind::corrupted);
  CHECK(bytes_of(folder.database()) == damaged);
}

TEST_CASE("a database that another connection holds is busy, and free again afterwards") {
  const Folder folder;
  fill(folder.database());
  for (const char* hold : {"BEGIN EXCLUSIVE", "PRAGMA locking_mode = EXCLUSIVE; BEGIN EXCLUSIVE"}) {
    CAPTURE(hold);
    {
      SQLite::Database other(folder.database(), SQLite::OPEN_READWRITE);
      other.exec(hold);
      const auto start = std::chrono::steady_clock::now();
      const Error error = refusal_of(folder.database());
      CHECK(error.kind == ErrorKind::busy);
      CHECK(has(error.remedy, "stop the other program"));
      CHECK(std::chrono::steady_clock::now() - start < std::chrono::milliseconds(3 * busy_timeout_ms));
    }
    opened(folder.database());
  }
}

TEST_CASE("a write that meets another writer is busy and stores nothing") {
  const Folder folder;
  const std::unique_ptr<Store> store = opened(folder.database());
  SQLite::Database other(folder.database(), SQLite::OPEN_READWRITE);
  other.exec("BEGIN IMMEDIATE");
  const Result<JournalHead> refused = store->append("harbour", "settings", "{}");
  REQUIRE_FALSE(refused);
  CHECK(refused.error().kind == ErrorKind::busy);
  other.exec("ROLLBACK");
  CHECK(value_of(store->append("harbour", "settings", "{}")).sequence == 1);
}

TEST_CASE("a file without the right to write") {
  const Folder folder;
  fill(folder.database());
  ::chmod(folder.path().c_str(), 0777);
  ::chmod(folder.database().c_str(), 0444);
  const std::string said = as_nobody([&] { return said_by_open(folder.database(), Store::Mode::write); });
  CHECK(has(said, "storage: " + folder.database().string()));
  CHECK(has(said, "cannot be written"));
  CHECK(as_nobody([&] { return said_by_open(folder.database(), Store::Mode::read); }) == "opened");
  // The empty log that a reader leaves is no lost log.
  fs::remove(folder.database());
  opened(folder.database());
}

TEST_CASE("a folder without the right to write") {
  const Folder folder;
  fill(folder.database());
  ::chmod(folder.database().c_str(), 0666);
  ::chmod(folder.path().c_str(), 0555);
  std::string said = as_nobody([&] { return said_by_open(folder.database(), Store::Mode::write); });
  CHECK(has(said, "storage: " + folder.path().string()));
  CHECK(has(said, "cannot be written"));
  // Even reading needs the log's index beside the file.
  said = as_nobody([&] { return said_by_open(folder.database(), Store::Mode::read); });
  CHECK(has(said, "storage: " + folder.database().string()));
  ::chmod(folder.path().c_str(), 0755);
  fs::remove(folder.database());
  ::chmod(folder.path().c_str(), 0555);
  said = as_nobody([&] { return said_by_open(folder.database(), Store::Mode::write); });
  CHECK(has(said, "storage: " + folder.path().string()));
  ::chmod(folder.path().c_str(), 0755);
}

TEST_CASE("a read store changes nothing and says so") {
  const Folder folder;
  fill(folder.database());
  const std::unique_ptr<Store> reader = opened(folder.database(), Store::Mode::read);
  CHECK(value_of(reader->head("harbour")).sequence == 1);
  const Result<JournalHead> refused = reader->append("harbour", "settings", "{}");
  REQUIRE_FALSE(refused);
  CHECK(refused.error().kind == ErrorKind::storage);
  CHECK_FALSE(reader->store_batch(batch_of("late.csv", {})));
  CHECK_FALSE(reader->store_nights({night_of("harbour", "2026-03-02")}));
  CHECK(value_of(reader->head("harbour")).sequence == 1);
}

}  // namespace nightweigh::store

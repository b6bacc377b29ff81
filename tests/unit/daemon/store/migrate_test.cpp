// The machinery of migrations, on lists made for it.
#include <SQLiteCpp/Database.h>
#include <doctest/doctest.h>

#include <stdexcept>

#include "daemon/store/database_store.h"
#include "daemon/store/schema.h"
#include "strategies/digest/sha256.h"
#include "tests/unit/daemon/store/folder.h"
#include "tests/unit/daemon/store/samples.h"

namespace nightweigh::store {
namespace {

// The compiled ones and some more.
std::vector<Migration> with(const std::vector<std::string>& more) {
  std::vector<Migration> all = compiled_migrations();
  for (const std::string& sql : more) {
    const std::string number = std::to_string(10000 + all.size() + 1).substr(1);
    all.push_back({number + "_more.sql", sql});
  }
  return all;
}

int version_in(const std::filesystem::path& file) {
  return SQLite::Database(file).execAndGet("PRAGMA user_version").getInt();
}

}  // namespace

TEST_CASE("the compiled migrations are the files, byte for byte and in order") {
  const std::vector<Migration>& compiled = compiled_migrations();
  std::set<std::string> names;
  for (const auto& entry : std::filesystem::directory_iterator(NIGHTWEIGH_SOURCE_DIR "/migrations")) {
    if (entry.path().extension() == ".sql") names.insert(entry.path().filename());
  }
  std::vector<std::string> compiled_names;
  for (const Migration& migration : compiled) {
    compiled_names.push_back(migration.name);
    CHECK(migration.sql ==
          bytes_of(std::filesystem::path(NIGHTWEIGH_SOURCE_DIR "/migrations") / migration.name));
  }
  CHECK(compiled_names == std::vector<std::string>(names.begin(), names.end()));
  CHECK(newest_version(compiled) == static_cast<int>(compiled.size()));
}

TEST_CASE("numbers with a gap or without form are our own bug") {
  CHECK_THROWS_AS(newest_version({{"0002_x.sql", ""}}), std::logic_error);
  CHECK_THROWS_AS(newest_version({{"1_x.sql", ""}}), std::logic_error);
  CHECK_THROWS_AS(newest_version({{"0001_x.sql", ""}, {"0001_y.sql", ""}}), std::logic_error);
  CHECK_THROWS_AS(newest_version({{"0001.sql", ""}}), std::logic_error);
  CHECK(newest_version({{"0001_x.sql", ""}, {"0002_y.sql", ""}}) == 2);
}

TEST_CASE("an older database is copied, then brought up to date step by step") {
  const Folder folder;
  const int first = newest_version(compiled_migrations());
  JournalHead head;
  {
    const std::unique_ptr<Store> store = opened(folder.database());
    head = value_of(store->append("harbour", "settings", "{}"));
  }
  const auto newer = with({"CREATE TABLE more (a TEXT) STRICT; INSERT INTO more VALUES ('[;]\"''');",
                           "ALTER TABLE more ADD COLUMN b TEXT;"});
  // A reader does not migrate.
  const auto reader = open_with(folder.database(), Store::Mode::read, newer);
  REQUIRE_FALSE(reader);
  CHECK(reader.error().kind == ErrorKind::storage);
  CHECK(has(reader.error().message(), "older than version " + std::to_string(first + 2)));
  CHECK(version_in(folder.database()) == first);

  const std::unique_ptr<Store> store = value_of(open_with(folder.database(), Store::Mode::write, newer));
  CHECK(value_of(store->head("harbour")).hash == head.hash);
  SQLite::Database plain(folder.database());
  CHECK(plain.execAndGet("PRAGMA user_version").getInt() == first + 2);
  CHECK(plain.execAndGet("SELECT a FROM more").getString() == "[;]\"'");
  CHECK(plain.execAndGet("SELECT count(*) FROM schema_migrations").getInt() == first + 2);
  CHECK(plain.execAndGet("SELECT sha256 FROM schema_migrations ORDER BY version DESC").getString() ==
        sha256_hex(newer.back().sql));

  // The copy is the database as it was, and opens with the program of its time.
  const std::filesystem::path copy = folder.database().string() + ".before-" + std::to_string(first + 1);
  CHECK(folder.names() ==
        std::set<std::string>{"nightweigh.db", "nightweigh.db-shm", "nightweigh.db-wal", copy.filename()});
  CHECK(version_in(copy) == first);
  CHECK(value_of(opened(copy, Store::Mode::read)->head("harbour")).hash == head.hash);
  CHECK(value_of(opened(copy, Store::Mode::write)->head("harbour")).hash == head.hash);
}

TEST_CASE("a new database gets no copy, and an up-to-date one no second") {
  const Folder folder;
  const auto newer = with({"CREATE TABLE more (a TEXT) STRICT;"});
  value_of(open_with(folder.database(), Store::Mode::write, newer));
  value_of(open_with(folder.database(), Store::Mode::write, newer));
  CHECK(folder.names() == std::set<std::string>{"nightweigh.db"});
  CHECK_FALSE(Store::open(folder.database(), Store::Mode::write));  // from the future now
}

TEST_CASE("a migration that fails leaves the version before it, its copy, and a way on") {
  const Folder folder;
  const int first = newest_version(compiled_migrations());
  opened(folder.database());
  const std::string good = "CREATE TABLE more (a TEXT) STRICT;";
  const auto bad = with({good, "CREATE TABLE half (a TEXT) STRICT; INSERT INTO nowhere VALUES (1);"});
  const auto refused = open_with(folder.database(), Store::Mode::write, bad);
  REQUIRE_FALSE(refused);
  CHECK(has(refused.error().place, bad.back().name));
  CHECK(has(refused.error().message(), "nowhere"));
  {
    SQLite::Database plain(folder.database());
    CHECK(plain.execAndGet("PRAGMA user_version").getInt() == first + 1);  // the good one stays
    CHECK_FALSE(plain.tableExists("half"));
    CHECK(plain.tableExists("more"));
  }
  CHECK(std::filesystem::exists(folder.database().string() + ".before-" + std::to_string(first + 1)));
  const auto mended = with({good, "CREATE TABLE half (a TEXT) STRICT;"});
  REQUIRE(open_with(folder.database(), Store::Mode::write, mended));
  // Going on keeps the copy of the start and adds one of the half way.
  CHECK(version_in(folder.database().string() + ".before-" + std::to_string(first + 1)) == first);
  CHECK(version_in(folder.database().string() + ".before-" + std::to_string(first + 2)) == first + 1);
}

TEST_CASE("a migration that would leave a row without what it refers to is undone") {
  const Folder folder;
  const int first = newest_version(compiled_migrations());
  {
    const std::unique_ptr<Store> store = opened(folder.database());
    REQUIRE(store->store_batch(batch_of("a.csv", {close_of("ALDER", "2026-03-02", "61.2")})));
  }
  const auto refused = open_with(folder.database(), Store::Mode::write,
                                 with({"DROP TRIGGER batches_keep_rows; DELETE FROM batches;"}));
  REQUIRE_FALSE(refused);
  CHECK(refused.error().kind == ErrorKind::corrupted);
  CHECK(refused.error().value == "closes");
  CHECK(version_in(folder.database()) == first);
  CHECK(value_of(opened(folder.database())->knows_batch(sha256_hex("a.csv"))));
}

TEST_CASE("a changed text of an applied migration is refused") {
  const Folder folder;
  value_of(open_with(folder.database(), Store::Mode::write, with({"CREATE TABLE more (a TEXT) STRICT;"})));
  const auto refused =
      open_with(folder.database(), Store::Mode::write, with({"CREATE TABLE more (a TEXT) STRICT; "}));
  REQUIRE_FALSE(refused);
  CHECK(refused.error().kind == ErrorKind::storage);
  CHECK(refused.error().value == "0002_more.sql");
}

TEST_CASE("a copy that cannot be made stops the migration") {
  const Folder folder;
  const int first = newest_version(compiled_migrations());
  opened(folder.database());
  // A folder with something in it cannot be replaced by a file.
  const std::filesystem::path copy = folder.database().string() + ".before-" + std::to_string(first + 1);
  std::filesystem::create_directories(copy / "kept");
  const auto refused =
      open_with(folder.database(), Store::Mode::write, with({"CREATE TABLE more (a TEXT) STRICT;"}));
  REQUIRE_FALSE(refused);
  CHECK(refused.error().kind == ErrorKind::storage);
  CHECK(has(refused.error().message(), "before-"));
  CHECK(version_in(folder.database()) == first);
  CHECK(std::filesystem::exists(copy / "kept"));
}

}  // namespace nightweigh::store

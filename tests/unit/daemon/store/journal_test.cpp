// The hash chain of a book's journal.
#include <SQLiteCpp/Database.h>
#include <doctest/doctest.h>

#include <limits>

#include "tests/unit/daemon/store/folder.h"
#include "tests/unit/daemon/store/samples.h"

namespace nightweigh::store {

// Source of the three values: GNU coreutils, by hand:
//   Z=$(printf '0%.0s' $(seq 64))
//   printf 'nightweigh journal 1\nharbour\n1\nsettings\n%s\n{"name":"harbour"}' $Z | sha256sum
//   printf 'nightweigh journal 1\nharbour\n2\nnight\n%s\n{"date":"2026-03-02","verdict":"stay"}' $FIRST |
//   sha256sum printf 'nightweigh journal 1\n\n18446744073709551615\n\n\n' | sha256sum
constexpr const char* first_hash = "0a3f8a9c294122b6a89d362efd3020cf42943bc21fed0c25738f4e993bbf07d9";
constexpr const char* second_hash = "7b0b5f7a3c7d1c52e178de5141d6abf7a1cbfc01618eed27ae49d8128e26e981";

TEST_CASE("entry_hash agrees with sha256sum") {
  CHECK(entry_hash("harbour", 1, "settings", std::string(64, '0'), R"({"name":"harbour"})") == first_hash);
  CHECK(entry_hash("harbour", 2, "night", first_hash, R"({"date":"2026-03-02","verdict":"stay"})") ==
        second_hash);
  CHECK(entry_hash("", std::numeric_limits<std::uint64_t>::max(), "", "", "") ==
        "8e5149853f0208086d0d3065c086b892dc8e972c582e43acd5e61d8e4e1e3bbc");
}

TEST_CASE("entries and nights of a book make one chain") {
  const Folder folder;
  const std::unique_ptr<Store> store = opened(folder.database());
  CHECK(value_of(store->append("harbour", "settings", R"({"name":"harbour"})")).hash == first_hash);
  NightToStore night = night_of("harbour", "2026-03-02");
  night.bytes = R"({"date":"2026-03-02","verdict":"stay"})";
  const std::vector<JournalHead> heads = value_of(store->store_nights({night}));
  REQUIRE(heads.size() == 1);
  CHECK(heads[0].sequence == 2);
  CHECK(heads[0].hash == second_hash);
  CHECK(value_of(store->head("harbour")).hash == second_hash);

  CHECK(value_of(store->append("harbour", "settings", "{}")).sequence == 3);
  CHECK(value_of(store->append("quay", "settings", "{}")).sequence == 1);
  const auto newest = value_of(store->newest("harbour", "settings"));
  REQUIRE(newest);
  CHECK(newest->sequence == 3);
  CHECK(newest->bytes == "{}");
  CHECK(newest->previous_hash == second_hash);
  CHECK(value_of(store->newest("harbour", "night"))->sequence == 2);
  CHECK_FALSE(value_of(store->newest("harbour", "halt")));
  CHECK_FALSE(value_of(store->newest("nowhere", "settings")));
  CHECK(value_of(store->books()) == std::vector<std::string>{"harbour", "quay"});

  const auto page = value_of(store->entries_after("harbour", 1, 1));
  REQUIRE(page.size() == 1);
  CHECK(page[0].sequence == 2);
  CHECK(page[0].kind == "night");
  CHECK(page[0].hash == second_hash);
  CHECK(value_of(store->entries_after("harbour", 0, 100)).size() == 3);
  CHECK(value_of(store->entries_after("harbour", 3, 100)).empty());
  CHECK(value_of(store->entries_after("harbour", std::numeric_limits<std::uint64_t>::max(), 100)).empty());
  CHECK(value_of(store->entries_after("harbour", 0, std::numeric_limits<std::size_t>::max())).size() == 3);
  CHECK(refolded(*store, "harbour").sequence == 3);
}

TEST_CASE("entries that break the form are refused and leave the head") {
  const Folder folder;
  const std::unique_ptr<Store> store = opened(folder.database());
  REQUIRE(store->append("harbour", "settings", "{}"));
  const std::string head = value_of(store->head("harbour")).hash;
  CHECK(store->append("harbour", "night", "{}").error().kind == ErrorKind::bad_input);
  CHECK(store->append("harbour", "", "{}").error().kind == ErrorKind::bad_input);
  CHECK(store->append("harbour", "set\ntings", "{}").error().kind == ErrorKind::bad_input);
  CHECK(store->append("", "settings", "{}").error().kind == ErrorKind::bad_input);
  CHECK(store->append("har\nbour", "settings", "{}").error().kind == ErrorKind::bad_input);
  CHECK(value_of(store->head("harbour")).hash == head);
  CHECK(value_of(store->books()) == std::vector<std::string>{"harbour"});
}

TEST_CASE("names and bytes are values, never SQL") {
  const Folder folder;
  const std::unique_ptr<Store> store = opened(folder.database());
  const std::string odd = "x'; DROP TABLE journal; --\"[]";
  const std::string bytes("{\"a\":\"\0\xff';\"}", 12);
  REQUIRE(store->append(odd, "settings", bytes));
  CHECK(value_of(store->newest(odd, "settings"))->bytes == bytes);
  CHECK(value_of(store->books()) == std::vector<std::string>{odd});
}

TEST_CASE("what only grows cannot be changed, deleted or forked through SQL") {
  const Folder folder;
  const std::unique_ptr<Store> store = opened(folder.database());
  REQUIRE(store->store_batch(batch_of("a.csv", {close_of("ALDER", "2026-03-02", "61.2")})));
  REQUIRE(store->store_nights({night_of("harbour", "2026-03-02")}));
  SQLite::Database plain(folder.database(), SQLite::OPEN_READWRITE);
  for (const char* table : {"batches", "closes", "journal", "nights", "night_batches"}) {
    CAPTURE(table);
    REQUIRE(plain.execAndGet("SELECT count(*) FROM " + std::string(table)).getInt() > 0);
    CHECK_THROWS_AS(plain.exec("DELETE FROM " + std::string(table)), SQLite::Exception);
  }
  CHECK_THROWS_AS(plain.exec("UPDATE batches SET source = ''"), SQLite::Exception);
  CHECK_THROWS_AS(plain.exec("UPDATE closes SET close = '1'"), SQLite::Exception);
  CHECK_THROWS_AS(plain.exec("UPDATE journal SET bytes = ''"), SQLite::Exception);
  CHECK_THROWS_AS(plain.exec("UPDATE nights SET verdict = 'move'"), SQLite::Exception);
  CHECK_THROWS_AS(plain.exec("UPDATE night_batches SET book = 'x'"), SQLite::Exception);
  const std::string hash(64, 'b');
  const auto insert = [&](int sequence, const std::string& previous) {
    plain.exec("INSERT INTO journal VALUES ('harbour', " + std::to_string(sequence) + ", 'halt', '{}', '" +
               previous + "', '" + hash + "')");
  };
  const std::string head = value_of(store->head("harbour")).hash;
  CHECK_THROWS_AS(insert(3, head), SQLite::Exception);  // a gap
  CHECK_THROWS_AS(insert(1, head), SQLite::Exception);  // again
  CHECK_THROWS_AS(insert(2, hash), SQLite::Exception);  // another past
  CHECK(value_of(store->head("harbour")).sequence == 1);
}

TEST_CASE("an altered entry is found by whoever reads it") {
  const Folder folder;
  const std::unique_ptr<Store> store = opened(folder.database());
  REQUIRE(store->append("harbour", "settings", R"({"eta":0.05})"));
  REQUIRE(store->store_nights({night_of("harbour", "2026-03-02")}));
  SQLite::Database(folder.database(), SQLite::OPEN_READWRITE)
      .exec("DROP TRIGGER journal_keeps_values; UPDATE journal SET bytes = replace(bytes, '5', '6')");
  const auto check = [](const auto& result, const std::string& place) {
    REQUIRE_FALSE(result);
    CHECK(result.error().kind == ErrorKind::corrupted);
    CHECK(has(result.error().place, place));
  };
  check(store->newest("harbour", "settings"), "journal of harbour, entry 1");
  check(store->entries_after("harbour", 0, 10), "journal of harbour, entry 1");
  CHECK(store->entries_after("harbour", 1, 10));  // the night has no 5 in it
}

}  // namespace nightweigh::store

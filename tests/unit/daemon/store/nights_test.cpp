// Nights: once, in order, together with their state.
#include <SQLiteCpp/Database.h>
#include <doctest/doctest.h>

#include "tests/unit/daemon/store/folder.h"
#include "tests/unit/daemon/store/samples.h"

namespace nightweigh::store {
namespace {

std::vector<std::string> dates_of(const std::vector<StoredNight>& nights) {
  std::vector<std::string> dates;
  for (const StoredNight& night : nights) dates.push_back(night.date.to_string());
  return dates;
}

}  // namespace

TEST_CASE("a night comes back with its bytes, its batches and the state after it") {
  const Folder folder;
  NightToStore night = night_of("harbour", "2026-03-02", "move");
  night.instruments = {"BRINE", "ALDER", "COPPER"};
  night.snapshot.covariation = std::string("\0\xff\x80 any bytes \0", 16);
  night.snapshot.strategy.clear();
  JournalHead head;
  {
    const std::unique_ptr<Store> store = opened(folder.database());
    // ALDER's second revision came in another batch; DUNE is no line of this book; the day after is not used.
    REQUIRE(store->store_batch(
        batch_of("a", {close_of("ALDER", "2026-03-02", "61.2"), close_of("BRINE", "2026-03-02", "7")})));
    REQUIRE(store->store_batch(batch_of("b", {close_of("ALDER", "2026-03-02", "61.3", 1)})));
    REQUIRE(store->store_batch(
        batch_of("c", {close_of("DUNE", "2026-03-02", "3"), close_of("BRINE", "2026-03-03", "7")})));
    head = value_of(store->store_nights({night})).front();
    // A later correction does not change what the night was made of.
    REQUIRE(store->store_batch(batch_of("d", {close_of("BRINE", "2026-03-02", "8", 5)})));
  }
  const std::unique_ptr<Store> store = opened(folder.database(), Store::Mode::read);
  const auto stored = value_of(store->night("harbour", day_of("2026-03-02")));
  REQUIRE(stored);
  CHECK(stored->date == night.date);
  CHECK(stored->verdict == "move");
  CHECK(stored->sequence == 1);
  CHECK(stored->hash == head.hash);
  CHECK(stored->bytes == night.bytes);
  std::vector<std::string> batches{sha256_hex("a"), sha256_hex("b")};
  std::sort(batches.begin(), batches.end());
  CHECK(stored->batches == batches);
  CHECK_FALSE(value_of(store->night("harbour", day_of("2026-03-03"))));
  CHECK_FALSE(value_of(store->night("quay", day_of("2026-03-02"))));

  const auto snapshot = value_of(store->snapshot("harbour"));
  REQUIRE(snapshot);
  CHECK(snapshot->date == night.date);
  CHECK(snapshot->desk == night.snapshot.desk);
  CHECK(snapshot->strategy.empty());
  CHECK(snapshot->covariation == night.snapshot.covariation);
  CHECK_FALSE(value_of(store->snapshot("quay")));
}

TEST_CASE("several nights of several books in one transaction") {
  const Folder folder;
  const std::unique_ptr<Store> store = opened(folder.database());
  const auto heads =
      value_of(store->store_nights({night_of("harbour", "2026-03-02"), night_of("quay", "2026-03-02"),
                                    night_of("harbour", "2026-03-03"), night_of("quay", "2026-03-05")}));
  REQUIRE(heads.size() == 4);
  CHECK(heads[0].sequence == 1);
  CHECK(heads[1].sequence == 1);
  CHECK(heads[2].sequence == 2);
  CHECK(heads[3].sequence == 2);
  CHECK(value_of(store->head("harbour")).hash == heads[2].hash);
  CHECK(value_of(store->head("quay")).hash == heads[3].hash);
  CHECK(refolded(*store, "harbour").hash == heads[2].hash);
  // Only the last state of each book is kept.
  CHECK(value_of(store->snapshot("harbour"))->date == day_of("2026-03-03"));
  CHECK(value_of(store->snapshot("quay"))->date == day_of("2026-03-05"));
  REQUIRE(store->store_nights({night_of("harbour", "2026-03-04")}));
  CHECK(value_of(store->snapshot("harbour"))->date == day_of("2026-03-04"));
  CHECK(SQLite::Database(folder.database()).execAndGet("SELECT count(*) FROM snapshots").getInt() == 2);
  CHECK(value_of(store->store_nights({})).empty());
}

TEST_CASE("a night is stored once and in order; nothing of a refused call stays") {
  const Folder folder;
  const std::unique_ptr<Store> store = opened(folder.database());
  REQUIRE(store->store_nights({night_of("harbour", "2026-03-02"), night_of("harbour", "2026-03-04")}));
  const JournalHead before = value_of(store->head("harbour"));
  const auto refused = [&](const std::vector<NightToStore>& nights, ErrorKind kind,
                           const std::string& place) {
    const auto result = store->store_nights(nights);
    REQUIRE_FALSE(result);
    CHECK(result.error().kind == kind);
    CHECK(has(result.error().message(), place));
    CHECK(value_of(store->head("harbour")).hash == before.hash);
    CHECK(value_of(store->head("quay")).sequence == 0);
    CHECK(value_of(store->snapshot("harbour"))->date == day_of("2026-03-04"));
    CHECK_FALSE(value_of(store->snapshot("quay")));
    CHECK(value_of(store->log("harbour", {})).size() == 2);
    CHECK(value_of(store->log("quay", {})).empty());
  };
  const NightToStore good = night_of("quay", "2026-03-02");
  refused({good, night_of("harbour", "2026-03-04")}, ErrorKind::conflict, "harbour on 2026-03-04");
  refused({good, night_of("harbour", "2026-03-03")}, ErrorKind::conflict, "harbour on 2026-03-03");
  refused({good, night_of("harbour", "2026-03-05"), night_of("harbour", "2026-03-05")}, ErrorKind::conflict,
          "harbour on 2026-03-05");
  refused({good, night_of("harbour", "2026-03-05", "perhaps")}, ErrorKind::bad_input,
          "harbour on 2026-03-05");
  NightToStore bad = night_of("harbour", "2026-03-05");
  bad.snapshot.date = day_of("2026-03-04");
  refused({good, bad}, ErrorKind::bad_input, "snapshot");
  bad = night_of("harbour", "2026-03-05");
  bad.instruments.clear();
  refused({good, bad}, ErrorKind::bad_input, "instruments");
  REQUIRE(store->store_nights({good, night_of("harbour", "2026-03-05")}));
}

TEST_CASE("an altered snapshot is found when it is read") {
  for (const char* change :
       {"UPDATE snapshots SET desk = replace(desk, '2', '3')",
        "UPDATE snapshots SET strategy = CAST(strategy || 'x' AS BLOB)",
        "UPDATE snapshots SET covariation = x''",
        // a byte from one column to the next
        "UPDATE snapshots SET strategy = CAST('strategy' AS BLOB), covariation = CAST('xcovariation' AS "
        "BLOB)",
        "UPDATE snapshots SET date = '2026-03-01'", "UPDATE snapshots SET date = 'yesterday'",
        "UPDATE snapshots SET book = CASE book WHEN 'quay' THEN 'harbour' ELSE 'pier' END"}) {
    CAPTURE(change);
    const Folder folder;
    const std::unique_ptr<Store> store = opened(folder.database());
    NightToStore night = night_of("harbour", "2026-03-02");
    night.snapshot.strategy = "strategyx";
    night.snapshot.covariation = "covariation";
    REQUIRE(store->store_nights({night, night_of("quay", "2026-03-02")}));
    REQUIRE(store->snapshot("harbour"));
    {
      SQLite::Database plain(folder.database(), SQLite::OPEN_READWRITE);
      if (has(change, "CASE")) plain.exec("DELETE FROM snapshots WHERE book = 'harbour'");
      plain.exec(change);
    }
    const auto read = store->snapshot("harbour");
    REQUIRE_FALSE(read);
    CHECK(read.error().kind == ErrorKind::corrupted);
    CHECK(has(read.error().place, "snapshot of harbour"));
    CHECK(has(read.error().remedy, "restore a backup"));
  }
}

TEST_CASE("the log: newest first, filtered, page by page") {
  const Folder folder;
  const std::unique_ptr<Store> store = opened(folder.database());
  REQUIRE(store->store_nights(
      {night_of("harbour", "2026-03-02", "move"), night_of("quay", "2026-03-03", "move"),
       night_of("harbour", "2026-03-03"), night_of("harbour", "2026-03-04", "move"),
       night_of("harbour", "2026-03-05", "withheld"), night_of("harbour", "2026-03-06")}));
  const auto log = [&](const LogFilter& filter) { return dates_of(value_of(store->log("harbour", filter))); };
  using Dates = std::vector<std::string>;
  CHECK(log({}) == Dates{"2026-03-06", "2026-03-05", "2026-03-04", "2026-03-03", "2026-03-02"});
  LogFilter filter;
  filter.from = day_of("2026-03-03");
  filter.to = day_of("2026-03-05");
  CHECK(log(filter) == Dates{"2026-03-05", "2026-03-04", "2026-03-03"});
  filter.before = day_of("2026-03-05");
  CHECK(log(filter) == Dates{"2026-03-04", "2026-03-03"});
  filter = {};
  filter.verdict = "move";
  CHECK(log(filter) == Dates{"2026-03-04", "2026-03-02"});
  filter.verdict = "' OR 1 = 1 --";
  CHECK(log(filter).empty());
  filter = {};
  filter.limit = 2;
  CHECK(log(filter) == Dates{"2026-03-06", "2026-03-05"});
  filter.before = day_of("2026-03-05");
  CHECK(log(filter) == Dates{"2026-03-04", "2026-03-03"});
  filter.before = day_of("2026-03-03");
  CHECK(log(filter) == Dates{"2026-03-02"});
  filter.before = day_of("2026-03-02");
  CHECK(log(filter).empty());
  filter = {};
  filter.limit = 0;
  CHECK(log(filter).empty());
  CHECK(value_of(store->log("nowhere", {})).empty());
}

}  // namespace nightweigh::store

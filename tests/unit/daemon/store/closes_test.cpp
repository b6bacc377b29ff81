// Batches and closes.
#include <SQLiteCpp/Database.h>
#include <doctest/doctest.h>
#include <signal.h>
#include <sys/resource.h>

#include "tests/unit/daemon/store/folder.h"
#include "tests/unit/daemon/store/samples.h"

namespace nightweigh::store {
namespace {

std::vector<Close> ten_thousand() {
  std::vector<Close> closes;
  closes.reserve(10000);
  for (int i = 0; i < 10000; ++i) {
    closes.push_back({day_of("2000-01-03").plus_days(i / 8), "LINE" + std::to_string(i % 8), 0,
                      Decimal::scaled(100000 + i, 3), std::nullopt, std::nullopt});
  }
  return closes;
}

}  // namespace

TEST_CASE("closes come back exactly as they were given") {
  const Folder folder;
  Close full = close_of("ALDER", "2026-03-02", "61.20", 3);
  full.dividend = Decimal::parse("0.0000000001");
  full.split = Decimal::parse("999999999999999999.9999999999");
  {
    const std::unique_ptr<Store> store = opened(folder.database());
    CHECK_FALSE(value_of(store->knows_batch(sha256_hex("a.csv"))));
    REQUIRE(store->store_batch(batch_of("a.csv", {full, close_of("ALDER", "2026-03-02", "61.1", 1)})));
    CHECK(value_of(store->knows_batch(sha256_hex("a.csv"))));
    CHECK_FALSE(value_of(store->knows_batch(sha256_hex("b.csv"))));
    REQUIRE(store->store_batch(batch_of("b.csv", {close_of("ALDER", "2026-03-02", "61", 2)})));
    REQUIRE(store->store_batch(batch_of("nothing new.csv", {})));
  }
  const std::unique_ptr<Store> store = opened(folder.database(), Store::Mode::read);
  const std::vector<StoredClose> all = value_of(store->closes_of("ALDER", day_of("2026-03-02")));
  REQUIRE(all.size() == 3);
  CHECK(all[0].close == close_of("ALDER", "2026-03-02", "61.1", 1));
  CHECK(all[1].close == close_of("ALDER", "2026-03-02", "61", 2));
  CHECK(all[2].close == full);
  CHECK(all[0].batch == sha256_hex("a.csv"));
  CHECK(all[1].batch == sha256_hex("b.csv"));
  CHECK(value_of(store->closes_of("BRINE", day_of("2026-03-02"))).empty());
  CHECK(value_of(store->closes_of("ALDER", day_of("2026-03-03"))).empty());
  CHECK(value_of(store->knows_batch(sha256_hex("nothing new.csv"))));
}

TEST_CASE("a day has the highest revision of each line, in the order asked for") {
  const Folder folder;
  const std::unique_ptr<Store> store = opened(folder.database());
  REQUIRE(store->store_batch(batch_of(
      "a.csv", {close_of("ALDER", "2026-03-02", "61.2"), close_of("BRINE", "2026-03-02", "7"),
                close_of("ALDER", "2026-03-02", "61.4", 10), close_of("ALDER", "2026-03-02", "61.3", 9),
                close_of("COPPER", "2026-03-03", "8")})));
  const auto lines = value_of(store->day({"COPPER", "BRINE", "ALDER"}, day_of("2026-03-02")));
  REQUIRE(lines.size() == 3);
  CHECK_FALSE(lines[0]);
  CHECK(lines[1] == close_of("BRINE", "2026-03-02", "7"));
  CHECK(lines[2] == close_of("ALDER", "2026-03-02", "61.4", 10));
  CHECK(value_of(store->day({}, day_of("2026-03-02"))).empty());
}

TEST_CASE("the next date with closes") {
  const Folder folder;
  const std::unique_ptr<Store> store = opened(folder.database());
  REQUIRE(store->store_batch(
      batch_of("a.csv", {close_of("ALDER", "2026-03-02", "61.2"), close_of("ALDER", "2026-03-06", "61.2"),
                         close_of("BRINE", "2026-03-04", "7"), close_of("COPPER", "2026-03-03", "8")})));
  const auto next = [&](const std::vector<std::string>& lines, const char* after, const char* from) {
    const auto date = value_of(store->next_date_with_closes(
        lines, after == nullptr ? std::optional<Date>() : day_of(after), day_of(from)));
    return date ? date->to_string() : "none";
  };
  CHECK(next({"ALDER", "BRINE"}, nullptr, "2026-01-01") == "2026-03-02");
  CHECK(next({"ALDER", "BRINE"}, nullptr, "2026-03-02") == "2026-03-02");  // at or after
  CHECK(next({"ALDER", "BRINE"}, nullptr, "2026-03-03") == "2026-03-04");
  CHECK(next({"ALDER", "BRINE"}, "2026-03-02", "2026-01-01") == "2026-03-04");  // strictly after
  CHECK(next({"ALDER", "BRINE"}, "2026-03-04", "2026-01-01") == "2026-03-06");
  CHECK(next({"BRINE", "COPPER"}, "2026-03-02", "2026-01-01") == "2026-03-03");
  CHECK(next({"ALDER", "BRINE"}, "2026-03-06", "2026-01-01") == "none");
  CHECK(next({"DUNE"}, nullptr, "1900-01-01") == "none");
  CHECK(next({}, nullptr, "1900-01-01") == "none");
}

TEST_CASE("a batch is stored whole or not at all") {
  const Folder folder;
  const std::unique_ptr<Store> store = opened(folder.database());
  REQUIRE(store->store_batch(batch_of("first.csv", {close_of("DUNE", "2001-01-01", "5")})));
  SQLite::Database plain(folder.database());
  const auto count = [&] { return plain.execAndGet("SELECT count(*) FROM closes").getInt(); };

  std::vector<Close> closes = ten_thousand();
  SUBCASE("a row in the middle is stored already") {
    closes[5000] = close_of("DUNE", "2001-01-01", "6");
    const Result<void> refused = store->store_batch(batch_of("many.csv", closes));
    REQUIRE_FALSE(refused);
    CHECK(refused.error().kind == ErrorKind::conflict);
    CHECK(has(refused.error().message(), "DUNE on 2001-01-01 revision 0"));
  }
  SUBCASE("a row in the middle breaks the form") {
    closes[5000].close = Decimal(0);
    const Result<void> refused = store->store_batch(batch_of("many.csv", closes));
    REQUIRE_FALSE(refused);
    CHECK(refused.error().kind == ErrorKind::bad_input);
  }
  SUBCASE("two rows of the batch say the same") {
    closes[9999] = closes[0];
    const Result<void> refused = store->store_batch(batch_of("many.csv", closes));
    REQUIRE_FALSE(refused);
    CHECK(refused.error().kind == ErrorKind::conflict);
  }
  SUBCASE("the batch is known") {
    const Result<void> refused = store->store_batch(batch_of("first.csv", closes));
    REQUIRE_FALSE(refused);
    CHECK(refused.error().kind == ErrorKind::conflict);
    CHECK(has(refused.error().message(), sha256_hex("first.csv")));
  }
  CHECK(count() == 1);
  CHECK_FALSE(value_of(store->knows_batch(sha256_hex("many.csv"))));

  // Nothing stays open or blocked: the mended batch goes in at once.
  std::vector<Close> mended = ten_thousand();
  REQUIRE(store->store_batch(batch_of("many.csv", mended)));
  CHECK(count() == 10001);
}

TEST_CASE("a batch that the disk does not take leaves nothing, and goes in later") {
  const Folder folder;
  const std::unique_ptr<Store> store = opened(folder.database());
  // A file size limit stands for a full disk: writes beyond it fail.
  struct rlimit before = {};
  REQUIRE(::getrlimit(RLIMIT_FSIZE, &before) == 0);
  const auto handler = ::signal(SIGXFSZ, SIG_IGN);
  struct rlimit small = before;
  small.rlim_cur = 200000;
  REQUIRE(::setrlimit(RLIMIT_FSIZE, &small) == 0);
  const Result<void> refused = store->store_batch(batch_of("many.csv", ten_thousand()));
  REQUIRE(::setrlimit(RLIMIT_FSIZE, &before) == 0);
  ::signal(SIGXFSZ, handler);
  REQUIRE_FALSE(refused);
  CHECK(refused.error().kind == ErrorKind::storage);
  CHECK(has(refused.error().message(), folder.database().string()));
  CHECK_FALSE(value_of(store->knows_batch(sha256_hex("many.csv"))));
  REQUIRE(store->store_batch(batch_of("many.csv", ten_thousand())));
  CHECK(SQLite::Database(folder.database()).execAndGet("SELECT count(*) FROM closes").getInt() == 10000);
}

TEST_CASE("values of the wrong form are refused by the database itself") {
  const Folder folder;
  const std::unique_ptr<Store> store = opened(folder.database());
  const auto kind_of = [&](const Close& close) {
    const Result<void> result = store->store_batch(batch_of("x.csv", {close}));
    REQUIRE_FALSE(result);
    return result.error().kind;
  };
  const Close good = close_of("ALDER", "2026-03-02", "61.2");
  Close bad = good;
  bad.close = Decimal(-1);
  CHECK(kind_of(bad) == ErrorKind::bad_input);
  bad = good;
  bad.dividend = Decimal(0);
  CHECK(kind_of(bad) == ErrorKind::bad_input);
  bad = good;
  bad.split = Decimal(-2);
  CHECK(kind_of(bad) == ErrorKind::bad_input);
  bad = good;
  bad.revision = 1000000;
  CHECK(kind_of(bad) == ErrorKind::bad_input);
  bad = good;
  bad.instrument = "alder'; DROP TABLE closes; --";
  CHECK(kind_of(bad) == ErrorKind::bad_input);
  StoredBatch batch = batch_of("x.csv", {});
  batch.digest = "ABC";
  CHECK(store->store_batch(batch).error().kind == ErrorKind::bad_input);
  REQUIRE(store->store_batch(batch_of("x.csv", {good})));
}

TEST_CASE("an altered price is found when it is read") {
  const Folder folder;
  const std::unique_ptr<Store> store = opened(folder.database());
  REQUIRE(store->store_batch(batch_of("a.csv", {close_of("ALDER", "2026-03-02", "61.2")})));
  SQLite::Database(folder.database(), SQLite::OPEN_READWRITE)
      .exec(
          "PRAGMA ignore_check_constraints = ON; DROP TRIGGER closes_keep_values; UPDATE closes SET close = "
          "'61,2'");
  const auto read = store->closes_of("ALDER", day_of("2026-03-02"));
  REQUIRE_FALSE(read);
  CHECK(read.error().kind == ErrorKind::corrupted);
  CHECK(read.error().value == "61,2");
  CHECK(has(read.error().place, "ALDER on 2026-03-02"));
  CHECK(store->day({"ALDER"}, day_of("2026-03-02")).error().kind == ErrorKind::corrupted);
}

}  // namespace nightweigh::store

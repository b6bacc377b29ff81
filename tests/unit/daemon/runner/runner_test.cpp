#include "daemon/runner/runner.h"

#include <doctest/doctest.h>

#include <algorithm>
#include <random>

#include "tests/unit/daemon/runner/desk.h"

namespace nightweigh::runner::testing {

using Status = feed::Acknowledgement::Status;

TEST_CASE("a whole day becomes a night, and the answer says so") {
  Desk desk({book()});
  const feed::Acknowledgement answer = desk.whole_day("2025-01-02");
  CHECK(answer.status == Status::taken);
  CHECK(answer.rows == 3);
  REQUIRE(answer.books.size() == 1);
  CHECK(answer.books[0].book == "harbour");
  CHECK_FALSE(answer.books[0].waiting);
  REQUIRE(answer.books[0].dates == std::vector<Date>{day("2025-01-02")});
  CHECK(answer.books[0].reasons.empty());
  CHECK(desk.view().last_night == day("2025-01-02"));
  CHECK(desk.view().next_night == day("2025-01-03"));
  CHECK(desk.log_text().find("book=harbour date=2025-01-02 verdict=") != std::string::npos);
}

TEST_CASE("a book waits for a missing close, and later days queue until it comes") {
  Desk desk({book()});
  feed::Acknowledgement answer = desk.csv("2025-01-02,ALDER,50\n2025-01-02,BRINE,20\n");
  REQUIRE(answer.books.size() == 1);
  CHECK(answer.books[0].waiting);
  CHECK(answer.books[0].reasons == std::vector<std::string>{"2025-01-02: no close of COPPER yet"});
  answer = desk.whole_day("2025-01-03");
  CHECK(answer.status == Status::taken);
  CHECK(answer.books[0].dates.empty());
  CHECK(desk.view().waiting == std::vector<std::string>{"2025-01-02: no close of COPPER yet"});
  answer = desk.csv("2025-01-02,COPPER,80\n");
  CHECK(answer.books[0].dates == std::vector<Date>{day("2025-01-02"), day("2025-01-03")});
  CHECK(desk.view().waiting.empty());
}

TEST_CASE("a trading day without any close holds later days up and names the remedy") {
  Desk desk({book()});
  desk.whole_day("2025-01-02");
  const feed::Acknowledgement answer = desk.whole_day("2025-01-06");  // Friday 3rd is missing
  REQUIRE(answer.books[0].reasons.size() == 1);
  CHECK(answer.books[0].reasons[0].find("2025-01-03: no close of any instrument yet") == 0);
  CHECK(answer.books[0].reasons[0].find("calendar") != std::string::npos);
}

TEST_CASE("the same batch again changes nothing; the same closes in another batch are known too") {
  Desk desk({book()});
  desk.whole_day("2025-01-02");
  const std::string head = desk.head();
  feed::Acknowledgement again = desk.whole_day("2025-01-02");
  CHECK(again.status == Status::known);
  CHECK(again.rows == 0);
  again = desk.csv("2025-01-02,COPPER,80.00\n2025-01-02,ALDER,50.0\n");
  CHECK(again.status == Status::known);
  CHECK(desk.head() == head);
}

TEST_CASE(
    "a differing close without a higher revision is a conflict; with one it is taken before the night") {
  Desk desk({book()});
  desk.csv("2025-01-02,ALDER,50\n");
  feed::Acknowledgement answer = desk.csv("2025-01-02,ALDER,51\n2025-01-02,BRINE,20\n");
  CHECK(answer.status == Status::refused);
  REQUIRE(answer.errors.size() == 1);
  CHECK(answer.errors[0].kind == ErrorKind::conflict);
  CHECK(answer.errors[0].row == 1);
  // Whole or nothing: BRINE's row was not taken either.
  CHECK(desk.store().closes_of("BRINE", day("2025-01-02"))->empty());
  answer = desk.runner().take(
      "date,instrument,close,revision\n2025-01-02,ALDER,51,1\n2025-01-02,BRINE,20,0\n2025-01-02,COPPER,80,"
      "0\n",
      false, "test");
  CHECK(answer.status == Status::taken);
  const auto night = nlohmann::json::parse(desk.view().night_bytes);
  CHECK(night["closes"][0]["close"] == "51");
  CHECK(night["closes"][0]["revision"] == 1);
}

TEST_CASE("a correction of a processed night is refused by name, and changes nothing") {
  Desk desk({book()});
  desk.whole_day("2025-01-02");
  const std::string head = desk.head();
  const feed::Acknowledgement answer =
      desk.runner().take("date,instrument,close,revision\n2025-01-02,ALDER,51,1\n", false, "test");
  CHECK(answer.status == Status::refused);
  REQUIRE(answer.errors.size() == 1);
  CHECK(answer.errors[0].kind == ErrorKind::not_built);
  CHECK(answer.errors[0].message().find("night of 2025-01-02 of book harbour") != std::string::npos);
  CHECK(desk.head() == head);
  CHECK(desk.whole_day("2025-01-03").status == Status::taken);
}

TEST_CASE("rows that no book can use are refused with their row and remedy") {
  Desk desk({book()}, "2025-01-10");
  const auto refused = [&](const std::string& row, const std::string& column, const std::string& part) {
    const feed::Acknowledgement answer = desk.csv("2025-01-02,ALDER,50\n" + row + "\n");
    CHECK(answer.status == Status::refused);
    REQUIRE(answer.errors.size() == 1);
    CHECK(answer.errors[0].row == 2);
    CHECK(answer.errors[0].column == column);
    CHECK(answer.errors[0].message().find(part) != std::string::npos);
  };
  refused("2025-01-02,ELM,50", "instrument", "is held by no book");
  refused("2025-01-13,BRINE,20", "date", "lies in the future");
  refused("2025-01-04,BRINE,20", "date", "is no trading day");
  refused("2025-01-01,BRINE,20", "date", "lies before the start");
  CHECK(desk.store().closes_of("ALDER", day("2025-01-02"))->empty());
}

TEST_CASE("'future' goes by the time zone of a book that holds the instrument") {
  BookSettings east = book("east");
  east.time_zone = "Asia/Tokyo";
  Desk desk({book("west"), east}, "2025-01-02");
  desk.clock().set(noon("2025-01-02") + std::chrono::hours(6));  // 18:00 UTC is the 3rd, 03:00, in Tokyo
  CHECK(desk.whole_day("2025-01-03").status == Status::taken);
  CHECK(desk.whole_day("2025-01-06").status == Status::refused);
}

TEST_CASE("an `any` calendar makes a night of each date that has closes, and of none before its last") {
  BookSettings free = book();
  free.calendar.any = true;
  Desk desk({free});
  CHECK(desk.whole_day("2025-01-04").books[0].dates.size() == 1);  // a Saturday
  CHECK(desk.whole_day("2025-01-09").books[0].dates.size() == 1);
  const feed::Acknowledgement late = desk.whole_day("2025-01-07");
  CHECK(late.status == Status::refused);
  CHECK(late.errors[0].message().find("lies before the last night of book harbour") != std::string::npos);
}

namespace {

std::vector<std::string> invented_days(std::size_t count) {
  std::vector<std::string> batches;
  std::mt19937_64 random(17);
  Date date = day("2025-01-02");
  std::vector<int> cents = {5000, 2000, 8000};
  while (batches.size() < count) {
    if (!date.is_weekend()) {
      std::string rows;
      for (std::size_t i = 0; i < cents.size(); ++i) {
        cents[i] += static_cast<int>(random() % 301) - 150;
        const char* name = i == 0 ? "ALDER" : i == 1 ? "BRINE" : "COPPER";
        rows += date.to_string() + "," + name + "," + std::to_string(cents[i] / 100) + "." +
                std::to_string(cents[i] / 10 % 10) + std::to_string(cents[i] % 10) + "\n";
      }
      batches.push_back(rows);
    }
    date = date.plus_days(1);
  }
  return batches;
}

}  // namespace

TEST_CASE("any order, repetition and restart gives the same journal") {
  std::vector<std::string> batches = invented_days(40);
  Desk straight({book(), book("meadow", "constant_mix")});
  for (const std::string& rows : batches) straight.csv(rows);
  const std::string harbour = straight.head("harbour"), meadow = straight.head("meadow");
  REQUIRE(straight.view().nights == 40);

  std::mt19937_64 random(23);
  for (int run = 0; run < 3; ++run) {
    std::vector<std::string> shuffled = batches;
    shuffled.insert(shuffled.end(), batches.begin(), batches.begin() + 10);
    std::shuffle(shuffled.begin(), shuffled.end(), random);
    Desk desk({book(), book("meadow", "constant_mix")});
    for (const std::string& rows : shuffled) {
      desk.csv(rows);
      if (random() % 5 == 0) desk.start();
    }
    CHECK(desk.view().nights == 40);
    CHECK(desk.head("harbour") == harbour);
    CHECK(desk.head("meadow") == meadow);
  }
}

TEST_CASE("all days in one batch give the journal of day by day") {
  const std::vector<std::string> batches = invented_days(70);  // more than one round
  Desk daily({book()}), bulk({book()});
  std::string all;
  for (const std::string& rows : batches) {
    daily.csv(rows);
    all += rows;
  }
  CHECK(bulk.csv(all).books[0].dates.size() == 70);
  CHECK(bulk.head() == daily.head());
}

TEST_CASE("a changed learning rate is entered in the journal and the rule is rebuilt from history") {
  const std::vector<std::string> batches = invented_days(30);
  Desk desk({book()});
  for (std::size_t i = 0; i < 20; ++i) desk.csv(batches[i]);
  desk.books()[0].strategy.eta = 0.3;
  resolve(desk.books()[0]);
  desk.start();
  CHECK(desk.log_text().find("rebuilt from history") != std::string::npos);
  for (std::size_t i = 20; i < 30; ++i) desk.csv(batches[i]);
  CHECK(desk.view().nights == 30);

  // The weights are those of a book that had the rate from the start.
  BookSettings fast = book();
  fast.strategy.eta = 0.3;
  Desk other({fast});
  for (const std::string& rows : batches) other.csv(rows);
  CHECK(nlohmann::json::parse(desk.view().night_bytes)["wanted"] ==
        nlohmann::json::parse(other.view().night_bytes)["wanted"]);
}

TEST_CASE("start, currency and instruments are fixed after the first night, and free before") {
  Desk desk({book()});
  desk.books()[0].start.cash = dec("2000000");
  resolve(desk.books()[0]);
  CHECK(desk.try_start());
  desk.whole_day("2025-01-02");
  desk.books()[0].start.cash = dec("3000000");
  resolve(desk.books()[0]);
  const Result<void> started = desk.try_start();
  REQUIRE_FALSE(started);
  CHECK(started.error().kind == ErrorKind::bad_settings);
  CHECK(started.error().message().find("key start") != std::string::npos);
}

TEST_CASE("a refused start leaves no journal entry of any book") {
  Desk desk({book("harbour"), book("meadow")});
  desk.whole_day("2025-01-02");
  const std::string head = desk.head("harbour");
  desk.books()[0].strategy.eta = 0.1;     // may change
  desk.books()[1].start.cash = dec("1");  // may not
  for (BookSettings& settings : desk.books()) resolve(settings);
  CHECK_FALSE(desk.try_start());
  const Result<std::unique_ptr<store::Store>> reader =
      store::Store::open(desk.folder().database(), store::Store::Mode::read);
  REQUIRE(reader);
  CHECK((*reader)->head("harbour")->hash == head);
}

TEST_CASE("closes of a day that is none of the book's make it neither wait nor stale") {
  BookSettings free = book("free");
  free.calendar.any = true;
  Desk desk({book("weekdays"), free});
  desk.whole_day("2025-01-02");
  desk.whole_day("2025-01-03");
  const feed::Acknowledgement answer = desk.whole_day("2025-01-04");  // a Saturday, a night of `free` alone
  REQUIRE(answer.books.size() == 2);
  CHECK(answer.books[1].dates.size() == 1);
  CHECK(desk.view("weekdays").waiting.empty());
  CHECK(desk.whole_day("2025-01-06").books[0].dates == std::vector<Date>{day("2025-01-06")});
}

TEST_CASE("after a stop request no night begins; the next start goes on") {
  const std::vector<std::string> batches = invented_days(40);
  std::string all;
  for (const std::string& rows : batches) all += rows;
  Desk straight({book()});
  straight.csv(all);
  Desk desk({book()});
  desk.runner().request_stop();
  const feed::Acknowledgement answer = desk.csv(all);
  CHECK(answer.status == Status::taken);
  CHECK(answer.books[0].dates.empty());
  CHECK(answer.books[0].reasons[0].find("stopping") != std::string::npos);
  desk.start();
  desk.runner().catch_up();
  CHECK(desk.head() == straight.head());
}

TEST_CASE("a night that cannot be computed keeps its book waiting and says why") {
  BookSettings big = book();
  big.start.holdings["ALDER"] = dec("999999999999999999");
  big.start.cash = dec("999999999999999999.99");
  big.instruments[0].lot_size = dec("0");
  Desk desk({big, book("meadow")});
  const feed::Acknowledgement answer =
      desk.whole_day("2025-01-02", "999999999999.9999999999", "0.0000000001", "999999999999.9999999999");
  REQUIRE(answer.books.size() == 2);
  CHECK(answer.books[1].dates.size() == 1);
  if (answer.books[0].dates.empty()) {
    REQUIRE_FALSE(answer.books[0].reasons.empty());
    CHECK(answer.books[0].reasons[0].find("cannot be computed") != std::string::npos);
  }
}

}  // namespace nightweigh::runner::testing

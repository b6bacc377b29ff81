#include "daemon/night/sizing.h"

#include <doctest/doctest.h>

#include <chrono>
#include <string>
#include <vector>

#include "daemon/night/fills.h"
#include "daemon/night/marking.h"
#include "tests/unit/daemon/night/book_for_tests.h"

namespace nightweigh::night::testing {
namespace {

struct Bench {
  BookSettings book = harbour();
  ledger::Account account;
  ClosesOfTheDay today;

  Bench(const std::vector<std::string>& lots, const std::vector<std::string>& prices,
        const std::vector<std::string>& held, const std::string& cash, const std::string& cost_bp = "0") {
    book.instruments.clear();
    book.costs.clear();
    std::vector<Quote> quotes;
    for (std::size_t line = 0; line < lots.size(); ++line) {
      book.instruments.push_back(instrument("LINE" + std::to_string(line), lots[line]));
      book.costs.push_back({dec(cost_bp), Decimal()});
      quotes.push_back({prices[line], "", ""});
      account.quantities.push_back(dec(held[line]));
    }
    account.cash = dec(cash);
    today = closes(book, "2025-01-02", quotes);
  }
  std::vector<double> held() const {
    std::vector<Decimal> prices;
    for (const auto& close : today.closes) prices.push_back(close->close);
    return marked_weights(account, prices);
  }
  SizedMove size(const std::vector<double>& target, double nu = 1.0) const {
    return size_move(account, held(), target, nu, today, book);
  }
};

TEST_CASE("sizing: nearest lots, a half toward what is held") {
  const Bench bench({"10", "1", "0"}, {"100", "100", "100"}, {"0", "0", "0"}, "100000");
  // 26.4 shares in lots of ten, 26.5 single shares, and the fraction itself.
  const SizedMove sized = bench.size({0.0264, 0.0265, 0.0264999999, 0.9206});
  REQUIRE(sized.orders.size() == 3);
  CHECK(sized.orders[0].quantity == dec("30"));
  CHECK(sized.orders[1].quantity == dec("26"));
  CHECK(sized.orders[2].quantity == dec("26.4999999"));
  CHECK(sized.account_after.cash ==
        dec("100000") - dec("3000") - dec("2600") - dec("2649.99999").rounded_half_even(2));
  CHECK(sized.traded_value == dec("3000") + dec("2600") + dec("2649.99999"));
}

// "floor to lots within cash": 1e6 * 0.3333 / 57.30 = 5816.75 shares, in lots of ten 5810 with 387.00 left of
// the line's money; the worked example floors, and names the rounding that gives back what cash cannot pay.
TEST_CASE("sizing: what rounding cannot pay is given back by the line that was rounded up most") {
  const Bench bench({"10"}, {"57.30"}, {"0"}, "333300");
  const SizedMove sized = bench.size({1.0, 0.0});  // 5816.75 -> nearest 5820 costs 333,486
  REQUIRE(sized.orders.size() == 1);
  CHECK(sized.orders[0].quantity == dec("5810"));
  CHECK(sized.account_after.cash == dec("387"));

  // Two lines rounded up, one lot too many: the one with the larger surplus in money gives back.
  const Bench two({"1", "1"}, {"100", "30"}, {"0", "0"}, "1000");
  // 0.66 -> 6.6 -> 7 (surplus 40), 0.34 -> 11.33 -> 11: 700 + 330 = 1030 > 1000
  const SizedMove given_back = two.size({0.66, 0.34, 0.0});
  REQUIRE(given_back.orders.size() == 2);
  CHECK(given_back.orders[0].quantity == dec("6"));
  CHECK(given_back.orders[1].quantity == dec("11"));
}

TEST_CASE("sizing: lines that the gate left alone are not touched, bit for bit") {
  const Bench bench({"1", "1"}, {"100", "30"}, {"5", "7.5"}, "1000");
  const std::vector<double> held = bench.held();
  const SizedMove sized = bench.size({held[0] + 0.2, held[1], held[2] - 0.2});
  REQUIRE(sized.orders.size() == 1);
  CHECK(sized.orders[0].line == 0);
  CHECK(sized.account_after.quantities[1] == dec("7.5"));
}

TEST_CASE("sizing: odd lots are sold whole, and nothing is oversold") {
  const Bench bench({"10"}, {"100"}, {"17"}, "0");
  CHECK(bench.size({0.0, 1.0}).orders[0].quantity == dec("17"));
  // Down to 40 %: 6.8 of 17 wanted, 10.2 to sell -> one lot.
  CHECK(bench.size({0.4, 0.6}).orders[0].quantity == dec("10"));
  // Down to 10 %: 15.3 to sell -> two lots would be 20: all 17.
  CHECK(bench.size({0.1, 0.9}).orders[0].quantity == dec("17"));
  for (const SizedMove& sized : {bench.size({0.0, 1.0}), bench.size({0.4, 0.6}), bench.size({0.1, 0.9})}) {
    CHECK_FALSE(sized.orders[0].buy);
    CHECK_FALSE(sized.account_after.quantities[0].is_negative());
  }
}

TEST_CASE("sizing: less than half a lot is no order") {
  const Bench bench({"10"}, {"100"}, {"17"}, "100000");
  CHECK(bench.size({bench.held()[0] + 0.0049, 1.0}).orders.empty());
}

TEST_CASE("sizing: sales pay for buys in the same sheet, costs included") {
  const Bench bench({"1", "1"}, {"100", "50"}, {"100", "0"}, "0", "50");
  // 0.995 = what is left a side; self-financing nu = (1 - 0.005) / (1 + 0.005) roughly: all to the second
  // line.
  const SizedMove sized = bench.size({0.0, 1.0, 0.0}, 0.99004975);
  REQUIRE(sized.orders.size() == 2);
  CHECK_FALSE(sized.account_after.cash.is_negative());
  CHECK(sized.orders[0].quantity == dec("100"));
  CHECK(sized.orders[1].quantity == dec("198"));  // 9950 / 50.25 = 198.0
  CHECK(sized.orders[0].estimated_cost == dec("50"));
  CHECK(sized.orders[1].estimated_cost == dec("49.5"));
}

TEST_CASE("sizing: the reserve stays, unless the cash at hand is less already") {
  Bench bench({"1"}, {"100"}, {"0"}, "10000");
  bench.book.cash.reserve = 0.055;
  CHECK(bench.size({0.949, 0.051}).account_after.cash == dec("600"));  // 94.9 -> 95 would leave 500 < 550
  Bench poor({"1", "1"}, {"100", "33"}, {"100", "0"}, "20");
  poor.book.cash.reserve = 0.055;
  const SizedMove sized = poor.size({0.5, 0.498, 0.002});
  CHECK(sized.account_after.cash >= dec("20"));
}

TEST_CASE("sizing and fills: shares worth next to nothing do not take for ever") {
  const auto started = std::chrono::steady_clock::now();
  const std::string price = "0.0000000001";
  Bench bench({"1", "1", "1"}, {price, price, "1"}, {"0", "0", "10000"}, "5000", "100");
  bench.book.cash.reserve = 0.3;
  const SizedMove sized = bench.size({0.4, 0.3, 0.3, 0.0}, 1.0);  // far below the reserve: much to give back
  CHECK(sized.account_after.cash >= dec("4500"));
  CHECK_FALSE(sized.orders.empty());

  ledger::Account account{dec("10.01"), {Decimal(), Decimal(), Decimal()}};
  std::vector<ledger::Row> rows;
  Sheet sheet{day("2025-01-01"), {}};
  for (std::size_t line = 0; line < 2; ++line)
    sheet.orders.push_back({line, true, dec("1000000000000"), dec(price), {}});
  fill_sheet(account, rows, sheet, bench.today, bench.book);
  CHECK_FALSE(account.cash.is_negative());
  CHECK(account.cash < dec("0.1"));
  CHECK(std::chrono::steady_clock::now() - started < std::chrono::seconds(1));
}

TEST_CASE("fills: never more is sold than is held, and what is not held is not sold") {
  const Bench bench({"1", "1"}, {"100", "30"}, {"5", "0"}, "10");
  ledger::Account account = bench.account;
  std::vector<ledger::Row> rows;
  const Sheet sheet{day("2025-01-01"),
                    {{0, false, dec("8"), dec("100"), {}}, {1, false, dec("3"), dec("30"), {}}}};
  fill_sheet(account, rows, sheet, bench.today, bench.book);
  CHECK(account.quantities == std::vector<Decimal>{Decimal(), Decimal()});
  CHECK(account.cash == dec("510"));
}

TEST_CASE("fills: without cash nothing is bought") {
  const Bench bench({"1", "0"}, {"100", "30"}, {"0", "0"}, "0");
  ledger::Account account = bench.account;
  std::vector<ledger::Row> rows;
  fill_sheet(account, rows,
             {day("2025-01-01"), {{0, true, dec("8"), dec("100"), {}}, {1, true, dec("3"), dec("30"), {}}}},
             bench.today, bench.book);
  CHECK(rows.empty());
  CHECK(account == bench.account);
}

}  // namespace
}  // namespace nightweigh::night::testing

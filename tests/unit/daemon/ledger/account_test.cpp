#include "daemon/ledger/account.h"

#include <doctest/doctest.h>

#include <functional>
#include <stdexcept>
#include <string>
#include <vector>

namespace nightweigh::ledger {
namespace {

Decimal dec(const char* text) {
  const std::optional<Decimal> value = Decimal::parse(text, 36, 36);
  REQUIRE(value);
  return *value;
}

TradeTerms terms(const char* close, const char* half_spread, const char* commission, int minor_units = 2) {
  return {dec(close), dec(half_spread), dec(commission), minor_units};
}

TEST_CASE("a trade's cash: worked by hand") {
  SUBCASE("buy 100 at 61.20, 3 bp half spread, 2 bp commission") {
    // price 61.20 * 1.0003 = 61.21836; proceeds -6121.836 -> -6121.84; commission 6120 * 0.0002 = 1.224
    // -> 1.22
    const TradeCash cash = trade_cash(dec("100"), terms("61.20", "0.0003", "0.0002"));
    CHECK(cash.price == dec("61.21836"));
    CHECK(cash.proceeds == dec("-6121.84"));
    CHECK(cash.commission == dec("1.22"));
    CHECK(cash.total() == dec("-6123.06"));
  }
  SUBCASE("sell the same") {
    // price 61.20 * 0.9997 = 61.18164; proceeds 6118.164 -> 6118.16; the commission is on the close
    const TradeCash cash = trade_cash(dec("-100"), terms("61.20", "0.0003", "0.0002"));
    CHECK(cash.price == dec("61.18164"));
    CHECK(cash.proceeds == dec("6118.16"));
    CHECK(cash.commission == dec("1.22"));
    CHECK(cash.total() == dec("6116.94"));
  }
  SUBCASE("what a trade brings is rounded against the book; its commission half to even") {
    CHECK(trade_cash(dec("1"), terms("0.125", "0", "0")).proceeds == dec("-0.13"));
    CHECK(trade_cash(dec("1"), terms("0.121", "0", "0")).proceeds == dec("-0.13"));
    CHECK(trade_cash(dec("1"), terms("0.12", "0", "0")).proceeds == dec("-0.12"));
    CHECK(trade_cash(dec("-1"), terms("0.129", "0", "0")).proceeds == dec("0.12"));
    CHECK(trade_cash(dec("-1"), terms("0.13", "0", "0")).proceeds == dec("0.13"));
    CHECK(trade_cash(dec("1"), terms("0.12500000001", "0", "0")).proceeds == dec("-0.13"));
    CHECK(trade_cash(dec("1"), terms("100", "0", "0.00005")).commission == dec("0"));
    CHECK(trade_cash(dec("1"), terms("300", "0", "0.00005")).commission == dec("0.02"));
  }
  SUBCASE("the currency's minor unit: none for yen, three for dinars (ISO 4217)") {
    CHECK(trade_cash(dec("3"), terms("1234.5", "0", "0.001", 0)).proceeds == dec("-3704"));  // 3703.5
    CHECK(trade_cash(dec("3"), terms("1234.5", "0", "0.001", 0)).commission == dec("4"));    // 3.7035
    CHECK(trade_cash(dec("1"), terms("1.2345", "0", "0", 3)).proceeds == dec("-1.235"));
  }
  SUBCASE("fractions of a share") {
    CHECK(trade_cash(dec("0.00000001"), terms("61.20", "0", "0")).proceeds == dec("-0.01"));
    CHECK(trade_cash(dec("-0.00000001"), terms("61.20", "0", "0")).proceeds.is_zero());
    CHECK(trade_cash(dec("16.33986928"), terms("61.2", "0", "0")).proceeds == dec("-1000"));  // 999.999999936
  }
}

struct Book {
  Account account;
  std::vector<Row> rows;

  Book(const char* cash, const char* quantity) {
    open_account(account, rows, dec(cash), {dec(quantity), Decimal()});
    rows.clear();
  }
};

TEST_CASE("opening: a row for the cash and one for each holding") {
  Account account;
  std::vector<Row> rows;
  open_account(account, rows, dec("100.5"), {dec("7"), Decimal(), dec("0.25")});
  CHECK(account.cash == dec("100.5"));
  CHECK(account.quantities == std::vector<Decimal>{dec("7"), Decimal(), dec("0.25")});
  REQUIRE(rows.size() == 3);
  for (const Row& row : rows) CHECK(name_of(row.cause) == "opening");
  CHECK_FALSE(rows[0].line);
  CHECK(rows[0].cash == dec("100.5"));
  CHECK(rows[2].line == std::size_t{2});
  CHECK(rows[2].quantity == dec("0.25"));
  CHECK(net_asset_value(account, {dec("61.2"), dec("5"), dec("0.1")}) == dec("528.925"));
}

TEST_CASE("splits") {
  SUBCASE("two for one") {
    Book book("10", "101");
    apply_split(book.account, book.rows, 0, dec("2"), dec("24.96"), Decimal(1), 2);
    CHECK(book.account.quantities[0] == dec("202"));
    CHECK(book.account.cash == dec("10"));
    REQUIRE(book.rows.size() == 1);
    CHECK(book.rows[0].quantity == dec("101"));
  }
  SUBCASE("three for two, with half a share left over: cash in lieu at the close after the split") {
    Book book("10", "101");
    apply_split(book.account, book.rows, 0, dec("1.5"), dec("40.01"), Decimal(1), 2);
    CHECK(book.account.quantities[0] == dec("151"));
    CHECK(book.account.cash == dec("30"));  // 0.5 * 40.01 = 20.005 -> 20.00, half to even
    REQUIRE(book.rows.size() == 2);
    CHECK(name_of(book.rows[1].cause) == "cash_in_lieu");
    CHECK(*book.rows[1].price == dec("40.01"));
  }
  SUBCASE("one for ten") {
    Book book("0", "1019");
    apply_split(book.account, book.rows, 0, dec("0.1"), dec("612.40"), Decimal(1), 2);
    CHECK(book.account.quantities[0] == dec("101"));
    CHECK(book.account.cash == dec("551.16"));  // 0.9 * 612.40
    CHECK(book.rows[0].quantity == dec("-918"));
  }
  SUBCASE("one for a hundred of a few shares: nothing but cash is left") {
    Book book("0", "99");
    apply_split(book.account, book.rows, 0, dec("0.01"), dec("500"), Decimal(1), 2);
    CHECK(book.account.quantities[0].is_zero());
    CHECK(book.account.cash == dec("495"));
  }
  SUBCASE("fractional holdings keep eight digits") {
    Book book("0", "0.00000003");
    apply_split(book.account, book.rows, 0, dec("0.5"), dec("2"), Decimal::scaled(1, 8), 2);
    CHECK(book.account.quantities[0] == dec("0.00000001"));
    CHECK(book.account.cash.is_zero());  // 1e-8 is worth less than half a cent: no row of 0
    CHECK(book.rows.size() == 1);
  }
  SUBCASE("nothing held: no row") {
    Book book("10", "0");
    apply_split(book.account, book.rows, 0, dec("2"), dec("24.96"), Decimal(1), 2);
    CHECK(book.rows.empty());
  }
}

TEST_CASE("dividends and interest") {
  Book book("1000", "101");
  apply_dividend(book.account, book.rows, 0, dec("0.08"), 2);
  CHECK(book.account.cash == dec("1008.08"));
  REQUIRE(book.rows.size() == 1);
  CHECK(*book.rows[0].price == dec("0.08"));
  apply_dividend(book.account, book.rows, 1, dec("0.08"), 2);
  CHECK(book.rows.size() == 1);

  // Simple interest: cash * rate * calendar days / 365, the convention that the settings state
  // ("actual/365").
  Book cash("1000000", "0");
  apply_interest(cash.account, cash.rows, dec("0.0365"), 3, 2);
  CHECK(cash.account.cash == dec("1000300"));
  apply_interest(cash.account, cash.rows, dec("0.02"), 1, 2);  // 54.810... -> 54.81
  CHECK(cash.account.cash == dec("1000354.81"));
  apply_interest(cash.account, cash.rows, dec("-0.01"), 1, 2);  // -27.407... -> -27.41
  CHECK(cash.account.cash == dec("1000327.4"));
  Book little("0.1", "0");
  apply_interest(little.account, little.rows, dec("0.02"), 1, 2);
  CHECK(little.rows.empty());
}

// A night's worth of everything, and then one lie at a time.
TEST_CASE("check_books finds every kind of tampering") {
  Account before;
  std::vector<Row> ignored;
  open_account(before, ignored, dec("10000"), {dec("100"), dec("40")});
  const std::vector<Decimal> closes_before{dec("48.30"), dec("10.01")}, closes{dec("24.96"), dec("10.50")};
  Account now = before;
  std::vector<Row> rows;
  apply_interest(now, rows, dec("0.02"), 1, 2);
  apply_dividend(now, rows, 1, dec("0.333"), 2);
  apply_split(now, rows, 0, dec("2.005"), closes[0], Decimal(1), 2);
  apply_trade(now, rows, 0, dec("-50"), terms("24.96", "0.0003", "0.0002"));
  apply_trade(now, rows, 1, dec("77"), terms("10.50", "0.0003", "0.0002"));
  REQUIRE_NOTHROW(check_books(before, now, rows, closes_before, closes));

  const auto broken = [&](const std::function<void(Account&, Account&, std::vector<Row>&)>& tamper) {
    Account was = before, is = now;
    std::vector<Row> with = rows;
    tamper(was, is, with);
    CHECK_THROWS_AS(check_books(was, is, with, closes_before, closes), std::logic_error);
  };
  broken([](Account&, Account& is, std::vector<Row>&) { is.cash += Decimal::scaled(1, 2); });
  broken([](Account& was, Account&, std::vector<Row>&) { was.cash -= Decimal::scaled(1, 2); });
  broken([](Account&, Account& is, std::vector<Row>&) { is.quantities[1] -= Decimal::scaled(1, 8); });
  broken([](Account&, Account& is, std::vector<Row>&) { std::swap(is.quantities[0], is.quantities[1]); });
  broken([](Account& was, Account&, std::vector<Row>&) { was.quantities[0] += Decimal(1); });
  broken([](Account&, Account& is, std::vector<Row>&) { is.quantities.pop_back(); });
  for (std::size_t row = 0; row < rows.size(); ++row) {
    broken([&](Account&, Account&, std::vector<Row>& with) {
      with.erase(with.begin() + static_cast<std::ptrdiff_t>(row));
    });
    broken([&](Account&, Account&, std::vector<Row>& with) { with.push_back(with[row]); });
    broken([&](Account&, Account&, std::vector<Row>& with) { with[row].cash += Decimal::scaled(1, 2); });
    if (rows[row].line) {
      broken([&](Account&, Account&, std::vector<Row>& with) { with[row].quantity += Decimal(1); });
    }
  }
  // Position and cash below 0, though the rows add up.
  const auto trade_below_zero = [&](const char* quantity) {
    Account is = now;
    std::vector<Row> with = rows;
    apply_trade(is, with, 0, dec(quantity), terms("24.96", "0", "0"));
    CHECK_THROWS_AS(check_books(before, is, with, closes_before, closes), std::logic_error);
  };
  trade_below_zero("-151");
  trade_below_zero("1000");
}

TEST_CASE("numbers beyond 38 digits throw DecimalOverflow instead of wrapping around") {
  Book book("999999999999999999", "999999999999999999");
  const TradeTerms huge = terms("999999999999999999", "0.0003", "0.0002");
  CHECK_THROWS_AS(trade_cash(dec("999999999999999999"), huge), DecimalOverflow);
  CHECK_THROWS_AS(
      apply_split(book.account, book.rows, 0, dec("999999999999999999.999"), dec("1"), Decimal(1), 2),
      DecimalOverflow);
  CHECK_THROWS_AS(apply_dividend(book.account, book.rows, 0, dec("999999999999999999.9999999999"), 2),
                  DecimalOverflow);
  CHECK_THROWS_AS(net_asset_value({Decimal(), {dec("9999999999999999999"), dec("9999999999999999999")}},
                                  {dec("9999999999999999999"), dec("9999999999999999999")}),
                  DecimalOverflow);
}

}  // namespace
}  // namespace nightweigh::ledger

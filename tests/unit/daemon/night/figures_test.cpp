// What the figures of a night mean, by hand-worked books.
#include <doctest/doctest.h>

#include <cmath>
#include <string>
#include <vector>

#include "tests/unit/daemon/night/book_for_tests.h"

namespace nightweigh::night::testing {
namespace {

// One instrument, no costs, half and half with cash through the reserve: every figure can be said in advance.
BookSettings half_and_half(int lag) {
  BookSettings book = harbour();
  book.instruments = {instrument("ALDER")};
  book.costs.assign(1, {Decimal(), Decimal()});
  book.cash.reserve = 0.5;
  book.gate.always = true;
  book.execution_lag_nights = lag;
  return book;
}

TEST_CASE("first night: relatives 1, nothing learned, wanted is the start mix, and the gate runs") {
  for (const char* rule : {"constant_mix", "exponentiated_gradient", "buy_and_hold"}) {
    Desk desk(harbour(rule));
    const Night night =
        desk.night("2025-01-02", {{"61.20", "", ""}, {"10.05", "0.5", ""}, {"250.00", "", "2"}});
    CHECK(night.evidence.relatives == std::vector<double>(4, 1.0));
    for (std::size_t line = 0; line < 3; ++line) {
      CHECK(night.evidence.wanted[line] == doctest::Approx(1.0 / 3.0).epsilon(1e-15));
    }
    CHECK(night.evidence.wanted[3] == 0.0);
    CHECK(night.after.strategy->days() == 0);
    CHECK(night.after.covariation.days() == 0);
    CHECK(night.evidence.verdict == Verdict::move);
    CHECK(night.evidence.held_before == std::vector<double>{0, 0, 0, 1});
    CHECK(night.evidence.held_after == night.evidence.held_before);  // filled tomorrow
    CHECK(night.evidence.cost_paid == 0.0);
    CHECK_FALSE(std::signbit(night.evidence.cost_paid));
    CHECK(night.after.opening_value == dec("1000000"));
    // Opening holdings are as of this night's close: its dividend and split are behind them.
    REQUIRE(night.evidence.rows.size() == 1);
    CHECK(night.evidence.rows[0].cause == ledger::Cause::opening);
    CHECK(record(night)["night"] == 1);
    CHECK(record(night)["wealth_net"] == 1.0);
    CHECK(record(night)["wealth_frictionless"] == 1.0);
    CHECK(night.after.pending);
  }
}

TEST_CASE("lag 1: the sheet is filled at the next night's close, before marking") {
  Desk desk(half_and_half(1));
  const Night first = desk.night("2025-01-02", {{"100", "", ""}});
  REQUIRE(first.evidence.sheet);
  REQUIRE(first.evidence.sheet->orders.size() == 1);
  CHECK(first.evidence.sheet->orders[0].quantity == dec("5000"));
  CHECK(first.evidence.turnover == 0.25);  // 500,000 / (2 * 1,000,000)
  CHECK(*first.evidence.moves_to == std::vector<double>{0.5, 0.5});

  // The close rises by a tenth before the fill: 5000 shares cost 550,000 now.
  const Night second = desk.night("2025-01-03", {{"110", "", ""}});
  CHECK(second.evidence.relatives == std::vector<double>{1.1, 1.0});
  CHECK(second.evidence.held_before == std::vector<double>{0, 1});
  CHECK(second.evidence.held_after == std::vector<double>{0.55, 0.45});
  CHECK(second.evidence.filled_sheets == std::vector<Date>{day("2025-01-02")});
  CHECK(second.evidence.value_before_fills == dec("1000000"));
  CHECK(second.evidence.value_after == dec("1000000"));
  CHECK(second.evidence.cost_paid == 0.0);
  // Gate starts from held_after, so the sheet sells what is above half: 50,000 / 110 = 454.5 -> 455 shares
  // (454.545 rounds to 455).
  REQUIRE(second.evidence.sheet);
  CHECK_FALSE(second.evidence.sheet->orders[0].buy);
  CHECK(second.evidence.sheet->orders[0].quantity == dec("455"));
  CHECK(record(second)["wealth_net"] == 1.0);
  CHECK(record(second)["wealth_frictionless"].get<double>() == doctest::Approx(1.05).epsilon(1e-15));

  // 5000 shares at 121 and 450,000: held_before is 605,000 of 1,055,000, before 455 shares are sold.
  const Night third = desk.night("2025-01-06", {{"121", "", ""}});
  CHECK(third.evidence.value_before_fills == dec("1055000"));
  CHECK(third.evidence.held_before[0] == doctest::Approx(605.0 / 1055.0).epsilon(1e-15));
  CHECK(third.evidence.held_after[0] == doctest::Approx(4545 * 121.0 / 1055000.0).epsilon(1e-15));
  CHECK(record(third)["wealth_net"].get<double>() == doctest::Approx(1.055).epsilon(1e-15));
  CHECK(record(third)["wealth_frictionless"].get<double>() == doctest::Approx(1.05 * 1.05).epsilon(1e-15));
}

TEST_CASE("lag 0: the sheet is filled at its own close, after sizing") {
  Desk desk(half_and_half(0));
  const Night first = desk.night("2025-01-02", {{"100", "", ""}});
  CHECK(first.evidence.held_before == std::vector<double>{0, 1});
  CHECK(first.evidence.held_after == std::vector<double>{0.5, 0.5});
  CHECK(first.evidence.filled_sheets == std::vector<Date>{day("2025-01-02")});
  CHECK_FALSE(first.after.pending);

  const Night second = desk.night("2025-01-03", {{"110", "", ""}});
  // 5000 shares at 110 and 500,000: 550 of 1050 before the fill, half of it after selling 227 shares
  // (25,000 / 110 = 227.27).
  CHECK(second.evidence.value_before_fills == dec("1050000"));
  CHECK(second.evidence.held_before[0] == doctest::Approx(550.0 / 1050.0).epsilon(1e-15));
  CHECK(second.evidence.held_after[0] == doctest::Approx(4773 * 110.0 / 1050000.0).epsilon(1e-15));
  CHECK(second.evidence.turnover == doctest::Approx(227 * 110.0 / 2100000.0).epsilon(1e-15));
  CHECK(record(second)["wealth_net"].get<double>() == doctest::Approx(1.05).epsilon(1e-15));
  CHECK(record(second)["wealth_frictionless"].get<double>() == doctest::Approx(1.05).epsilon(1e-15));
}

TEST_CASE("cost_paid: what the fills and their costs took, in nats, at either lag") {
  for (const int lag : {0, 1}) {
    BookSettings book = half_and_half(lag);
    book.cash = {true, 0.0, Decimal()};
    book.costs.assign(1, {dec("20"), dec("30")});
    Desk desk(book);
    Night night = desk.night("2025-01-02", {{"100", "", ""}});
    if (lag == 1) night = desk.night("2025-01-03", {{"100", "", ""}});
    // nu = 1 / (1 + 0.5 * 0.005): self-financing with costs on the stock alone; 4987.53 -> 4988 shares.
    CHECK(night.after.account.quantities[0] == dec("4988"));
    // 4988 * 100.30 + 4988 * 100 * 0.002
    CHECK(night.after.account.cash == dec("1000000") - dec("500296.4") - dec("997.6"));
    CHECK(night.evidence.value_before_fills - night.evidence.value_after == dec("2494"));
    CHECK(night.evidence.cost_paid == doctest::Approx(-std::log(1 - 0.002494)).epsilon(1e-13));
    CHECK(record(night)["wealth_net"].get<double>() == doctest::Approx(1 - 0.002494).epsilon(1e-15));
  }
}

// Worked example of total-return relatives with a split and a dividend (closes 46.99, 48.30, then two for one
// and 24.96, then a dividend of 0.08 and 24.53), printed in a note on adjusting price series to the
// conventions of a well-known academic price file; the relatives were computed from it in full precision.
TEST_CASE("relatives with a split and a dividend") {
  BookSettings book = half_and_half(1);
  book.start = {day("2025-01-02"), dec("0"), {{"ALDER", dec("101")}}};
  book.cash.reserve = 0.0;
  Desk desk(book);
  desk.night("2025-01-02", {{"46.99", "", ""}});
  const Night second = desk.night("2025-01-03", {{"48.30", "", ""}});
  const Night split = desk.night("2025-01-06", {{"24.96", "", "2"}});
  const Night dividend = desk.night("2025-01-07", {{"24.53", "0.08", ""}});
  CHECK(std::abs(second.evidence.relatives[0] - 48.30 / 46.99) < 1e-15);
  CHECK(std::abs(split.evidence.relatives[0] - 1.0335403727) < 5e-11);
  CHECK(std::abs(split.evidence.relatives[0] - 2 * 24.96 / 48.30) < 1e-15);
  CHECK(std::abs(dividend.evidence.relatives[0] - 0.9859775641) < 5e-11);
  // The account earned the same: 101 shares became 202, and the dividend stands in cash.
  CHECK(split.after.account.quantities[0] == dec("202"));
  CHECK(split.evidence.value_before_fills == dec("202") * dec("24.96"));
  CHECK(dividend.evidence.value_before_fills == dec("202") * dec("24.53") + dec("16.16"));
  CHECK(record(dividend)["wealth_frictionless"].get<double>() ==
        doctest::Approx(48.30 / 46.99 * (2 * 24.96 / 48.30) * (24.61 / 24.96)).epsilon(1e-14));
}

// "split*P/(P+D)" with the ex-date close, the other published convention, reinvests at that close; for one
// day it is the reciprocal adjustment of the same total return.
TEST_CASE("relatives: special dividend and reverse split, worked by hand") {
  Desk desk(half_and_half(1));
  desk.night("2025-01-02", {{"50", "", ""}});
  CHECK(desk.night("2025-01-03", {{"46", "5", ""}}).evidence.relatives[0] == 1.02);
  CHECK(desk.night("2025-01-06", {{"460", "", "0.1"}}).evidence.relatives[0] == 1.0);
  // Both on one day: the dividend is a share before the split.
  CHECK(desk.night("2025-01-07", {{"224", "12", "2"}}).evidence.relatives[0] == 1.0);
}

TEST_CASE("a split acts on the holdings and on the pending sheet") {
  BookSettings book = half_and_half(1);
  book.gate.always = false;
  Desk desk(book);
  const Night first = desk.night("2025-01-02", {{"100", "", ""}});
  REQUIRE(first.after.pending);
  const Night second = desk.night("2025-01-03", {{"50", "", "2"}});
  CHECK(second.after.account.quantities[0] == dec("10000"));  // the order for 5000 became one for 10,000
  CHECK(second.evidence.held_after == std::vector<double>{0.5, 0.5});
}

TEST_CASE("an order that sells everything still does after a split, odd lots included") {
  BookSettings book = harbour();
  book.instruments = {instrument("ALDER", "10"), instrument("BRINE")};
  book.costs.assign(2, {Decimal(), Decimal()});
  book.start = {day("2025-01-02"), dec("1000"), {{"ALDER", dec("1007")}, {"BRINE", dec("1000")}}};
  book.strategy.weights = {{"ALDER", 0.0}, {"BRINE", 1.0}};
  book.gate.always = true;
  Desk desk(book);
  const Night first = desk.night("2025-01-02", {{"10", "", ""}, {"10", "", ""}});
  REQUIRE(first.evidence.sheet);
  CHECK(first.evidence.sheet->orders[0].quantity == dec("1007"));
  const Night second = desk.night("2025-01-03", {{"5", "", "2"}, {"10", "", ""}});
  CHECK(second.after.account.quantities[0].is_zero());

  Desk odd(book);
  odd.night("2025-01-02", {{"10", "", ""}, {"10", "", ""}});
  const Night three_for_two = odd.night("2025-01-03", {{"6.66", "", "1.5"}, {"10", "", ""}});
  CHECK(three_for_two.after.account.quantities[0].is_zero());  // 1510 shares sold, half a share in cash
}

TEST_CASE("a dividend goes to the shares held before any fill") {
  Desk desk(half_and_half(1));
  desk.night("2025-01-02", {{"100", "", ""}});
  const Night second = desk.night("2025-01-03", {{"99", "1", ""}});  // the order is filled ex dividend
  for (const ledger::Row& row : second.evidence.rows) CHECK(row.cause != ledger::Cause::dividend);
  const Night third = desk.night("2025-01-06", {{"98", "1", ""}});
  REQUIRE(third.evidence.rows.size() >= 1);
  CHECK(third.evidence.rows[0].cause == ledger::Cause::dividend);
  CHECK(third.evidence.rows[0].cash == dec("5000"));
}

TEST_CASE("interest: calendar days / 365 on the cash, and the same in the relatives") {
  BookSettings book = half_and_half(1);
  book.cash.yearly_rate = dec("0.0365");
  book.gate.always = false;
  book.costs.assign(1, {dec("2000"), dec("2000")});  // nothing pays
  Desk desk(book);
  desk.night("2025-01-02", {{"100", "", ""}});
  const Night friday = desk.night("2025-01-03", {{"100", "", ""}});
  CHECK(friday.evidence.relatives[1] == doctest::Approx(1.0001).epsilon(1e-16));
  const Night monday = desk.night("2025-01-06", {{"100", "", ""}});
  CHECK(monday.evidence.relatives[1] == doctest::Approx(1.0003).epsilon(1e-16));
  REQUIRE(monday.evidence.rows.size() == 1);
  CHECK(monday.evidence.rows[0].cause == ledger::Cause::interest);
  CHECK(monday.evidence.rows[0].cash == (friday.after.account.cash * dec("0.0003")).rounded_half_even(2));
}

TEST_CASE("the reserve is a floor: costs and rounding come out of the buys") {
  BookSettings book = half_and_half(0);
  book.costs.assign(1, {dec("20"), dec("30")});
  const Night night = Desk(book).night("2025-01-02", {{"100", "", ""}});
  // A share costs 100.50: 4975 leave 500,012.50, one more would leave less than the half that is to stay.
  CHECK(night.after.account.quantities[0] == dec("4975"));
  CHECK(night.after.account.cash == dec("500012.5"));
}

TEST_CASE("buys shrink in whole lots where cash would go negative; the book stays whole") {
  BookSettings book = harbour();
  book.instruments = {instrument("ALDER", "10"), instrument("BRINE", "1")};
  book.costs.assign(2, {dec("10"), dec("20")});
  book.gate.always = true;
  Desk desk(book);
  const Night first = desk.night("2025-01-02", {{"100", "", ""}, {"7.77", "", ""}});
  REQUIRE(first.evidence.sheet);
  const Decimal ordered = first.evidence.sheet->orders[0].quantity;
  const Night second = desk.night("2025-01-03", {{"130", "", ""}, {"8", "", ""}});
  CHECK_FALSE(second.after.account.cash.is_negative());
  CHECK(second.after.account.cash < dec("1310"));  // less than a lot of either line is left over, nearly
  const Decimal bought = second.after.account.quantities[0];
  CHECK(bought < ordered);
  CHECK(bought.floor_to_multiple(dec("10")) == bought);
  // In proportion: both by cash / needed.
  const double share = bought.to_double() / ordered.to_double();
  const double other =
      second.after.account.quantities[1].to_double() / first.evidence.sheet->orders[1].quantity.to_double();
  CHECK(share == doctest::Approx(other).epsilon(0.003));
}

TEST_CASE("buy and hold: the gate is asked until the first sheet, then never again") {
  BookSettings book = harbour("buy_and_hold");
  Desk desk(book);
  const Night first = desk.night("2025-01-02", {{"61.20", "", ""}, {"10.05", "", ""}, {"250.00", "", ""}});
  REQUIRE(first.evidence.verdict == Verdict::move);
  CHECK(first.evidence.wanted != first.evidence.held_after);
  const Night second = desk.night("2025-01-03", {{"71.20", "", ""}, {"8.05", "", ""}, {"280.00", "", ""}});
  CHECK(second.evidence.verdict == Verdict::stay);
  CHECK(second.evidence.wanted == second.evidence.held_after);
  const Night third = desk.night("2025-01-06", {{"171.20", "", ""}, {"4.05", "", ""}, {"280.00", "", ""}});
  CHECK(third.evidence.verdict == Verdict::stay);
  CHECK(third.evidence.wanted == third.evidence.held_after);
  CHECK_FALSE(third.after.pending);

  // Costs that nothing can pay back: no sheet, and the question stands the next night.
  book.costs.assign(3, {dec("2400"), dec("2400")});
  book.gate.payback_days_max = 1e-9;
  Desk dear(book);
  dear.night("2025-01-02", {{"61.20", "", ""}, {"10.05", "", ""}, {"250.00", "", ""}});
  const Night waiting = dear.night("2025-01-03", {{"61.30", "", ""}, {"10.06", "", ""}, {"251.00", "", ""}});
  CHECK(waiting.evidence.verdict == Verdict::stay);
  CHECK(waiting.evidence.wanted != waiting.evidence.held_after);
}

TEST_CASE("always: all the way to the wanted weights, whatever it costs") {
  BookSettings book = harbour();
  book.gate.always = true;
  book.costs.assign(3, {dec("200"), dec("300")});
  Desk desk(book);
  desk.night("2025-01-02", {{"61.20", "", ""}, {"10.05", "", ""}, {"250.00", "", ""}});
  const Night second = desk.night("2025-01-03", {{"61.20", "", ""}, {"10.05", "", ""}, {"250.00", "", ""}});
  CHECK((second.evidence.verdict == Verdict::move || second.evidence.below_one_lot));
  const Night third = desk.night("2025-01-06", {{"63.20", "", ""}, {"10.01", "", ""}, {"245.00", "", ""}});
  CHECK(third.evidence.verdict == Verdict::move);
  for (std::size_t line = 0; line < 3; ++line) {
    CHECK(std::abs((*third.evidence.moves_to)[line] - 1.0 / 3.0) < 250.0 / 900000.0);
  }
}

TEST_CASE("payback_days_max: null takes the limit away") {
  BookSettings book = harbour();
  book.gate.payback_days_max = 1e-9;
  const std::vector<Quote> quotes{{"61.20", "", ""}, {"10.05", "", ""}, {"250.00", "", ""}};
  const Night limited = Desk(book).night("2025-01-02", quotes);
  CHECK(limited.evidence.verdict == Verdict::stay);
  CHECK(limited.evidence.decision.worth.reason == gate::Worth::Reason::payback_too_long);
  book.gate.payback_days_max.reset();
  CHECK(Desk(book).night("2025-01-02", quotes).evidence.verdict == Verdict::move);
}

TEST_CASE("halted: learned and marked, but no sheet; resumed: as if nothing had been") {
  const std::vector<Quote> quotes{{"61.20", "", ""}, {"10.05", "", ""}, {"250.00", "", ""}};
  Desk desk(harbour("exponentiated_gradient"));
  const Night halted = desk.night("2025-01-02", quotes, {Halt{"the desk", "fire drill"}});
  CHECK(halted.evidence.verdict == Verdict::withheld);
  CHECK_FALSE(halted.evidence.sheet);
  CHECK_FALSE(halted.after.pending);
  CHECK_FALSE(halted.after.emitted);
  CHECK(halted.evidence.turnover == 0.0);
  CHECK(halted.evidence.moves_to);
  CHECK(halted.evidence.reason.find("fire drill") != std::string::npos);
  CHECK(record(halted)["sheet"].is_null());
  CHECK(record(halted)["lines"] == 0);
  CHECK_FALSE(record(halted)["cost_bp"].is_null());

  const Night still = desk.night("2025-01-03", quotes);
  CHECK(still.evidence.verdict == Verdict::withheld);
  CHECK(still.after.strategy->days() == 1);
  const Night resumed = desk.night("2025-01-06", quotes, {Resume{"the desk", "drill over"}});
  CHECK(resumed.evidence.verdict == Verdict::move);
  CHECK_FALSE(resumed.after.halted);

  // Both in one day, in their order.
  Desk twice(harbour());
  CHECK(twice.night("2025-01-02", quotes, {Halt{"a", "b"}, Resume{"a", "c"}}).evidence.verdict ==
        Verdict::move);
  Desk other(harbour());
  CHECK(other.night("2025-01-02", quotes, {Resume{"a", "c"}, Halt{"a", "b"}}).evidence.verdict ==
        Verdict::withheld);
  // A sheet that was out before the halt is still filled.
  Desk pending(harbour());
  pending.night("2025-01-02", quotes);
  const Night filled = pending.night("2025-01-03", quotes, {Halt{"a", "b"}});
  CHECK(filled.evidence.filled_sheets == std::vector<Date>{day("2025-01-02")});
}

TEST_CASE("reserve and cash in the mix") {
  BookSettings book = harbour();
  book.cash.reserve = 0.1;
  const std::vector<Quote> quotes{{"61.20", "", ""}, {"10.05", "", ""}, {"250.00", "", ""}};
  const Night reserve = Desk(book).night("2025-01-02", quotes);
  CHECK(reserve.evidence.wanted[3] == 0.1);
  CHECK(reserve.evidence.wanted[0] == doctest::Approx(0.3).epsilon(1e-15));
  book.cash = {true, 0.0, Decimal()};
  const Night mix = Desk(book).night("2025-01-02", quotes);
  CHECK(mix.evidence.wanted == std::vector<double>(4, 0.25));
  book.strategy.weights = {{"ALDER", 0.5}, {"CASH", 0.5}};
  const Night given = Desk(book).night("2025-01-02", quotes);
  CHECK(given.evidence.wanted == std::vector<double>{0.5, 0, 0, 0.5});
}

}  // namespace
}  // namespace nightweigh::night::testing

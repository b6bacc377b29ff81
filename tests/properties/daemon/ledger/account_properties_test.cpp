// The ledger against an account in exact fractions (boost::multiprecision), over random events.
#include <doctest/doctest.h>
#include <rapidcheck.h>

#include <boost/multiprecision/cpp_int.hpp>
#include <string>
#include <vector>

#include "daemon/ledger/account.h"

namespace nightweigh::ledger {
namespace {

using Rational = boost::multiprecision::cpp_rational;
using Integer = boost::multiprecision::cpp_int;

Rational exact(const Decimal& value) {
  std::string text = value.to_string();
  const std::size_t point = text.find('.');
  Integer unit = 1;
  if (point != std::string::npos) {
    for (std::size_t i = point + 1; i < text.size(); ++i) unit *= 10;
    text.erase(point, 1);
  }
  // A leading 0 would be read as octal.
  const bool negative = text.front() == '-';
  if (negative) text.erase(0, 1);
  text.erase(0, std::min(text.find_first_not_of('0'), text.size() - 1));
  const Integer digits(text);
  return Rational(negative ? Integer(-digits) : digits, unit);
}

// Half to even at two digits, by its definition: the nearest integer, of two the even one.
Rational to_cents(const Rational& value) {
  const Rational scaled = value * 100;
  Integer below = numerator(scaled) / denominator(scaled);
  if (scaled < 0 && Rational(below) != scaled) below -= 1;  // floor
  const Rational rest = scaled - Rational(below);
  if (rest > Rational(1, 2) || (rest == Rational(1, 2) && below % 2 != 0)) below += 1;
  return Rational(below, 100);
}

Rational floor_to_cents(const Rational& value) {
  const Rational scaled = value * 100;
  Integer below = numerator(scaled) / denominator(scaled);
  if (scaled < 0 && Rational(below) != scaled) below -= 1;
  return Rational(below, 100);
}

Decimal number(std::int64_t low, std::int64_t high, int scale) {
  return Decimal::scaled(*rc::gen::inRange<std::int64_t>(low, high), scale);
}

TEST_CASE("random events: the account is what exact fractions say, and the books balance") {
  CHECK(rc::check([] {
    Account before;
    std::vector<Row> opening;
    open_account(before, opening, number(1, 100000000, 2), {number(0, 10000, 0), number(0, 1000000000, 8)});
    const std::vector<Decimal> closes_before{number(1, 1000000, 4), number(1, 1000000, 4)};
    const std::vector<Decimal> closes{number(1, 1000000, 4), number(1, 1000000, 4)};
    const std::vector<Decimal> smallest{Decimal(1), Decimal::scaled(1, 8)};

    Account now = before;
    std::vector<Row> rows;
    Rational cash = exact(before.cash);
    std::vector<Rational> quantities{exact(before.quantities[0]), exact(before.quantities[1])};
    const int events = *rc::gen::inRange(1, 12);
    for (int event = 0; event < events; ++event) {
      const std::size_t line = *rc::gen::inRange<std::size_t>(0, 2);
      switch (*rc::gen::inRange(0, 4)) {
        case 0: {
          const Decimal ratio = number(1, 400, 2);
          apply_split(now, rows, line, ratio, closes[line], smallest[line], 2);
          const Rational whole = quantities[line] * exact(ratio);
          const Rational unit = exact(smallest[line]);
          const Rational steps = whole / unit;
          const Rational kept = Rational(Integer(numerator(steps) / denominator(steps))) * unit;
          cash += to_cents((whole - kept) * exact(closes[line]));
          quantities[line] = kept;
          break;
        }
        case 1: {
          const Decimal dividend = number(1, 100000, 5);
          apply_dividend(now, rows, line, dividend, 2);
          cash += to_cents(quantities[line] * exact(dividend));
          break;
        }
        case 2: {
          const Decimal rate = number(-100, 2000, 4);
          const int days = *rc::gen::inRange(1, 10);
          apply_interest(now, rows, rate, days, 2);
          cash += to_cents(cash * exact(rate) * days / 365);
          break;
        }
        default: {
          const TradeTerms terms{closes[line], number(0, 100, 4), number(0, 100, 4), 2};
          Decimal quantity = line == 0 ? number(-50, 50, 0) : number(-50000000, 50000000, 8);
          if ((now.quantities[line] + quantity).is_negative()) quantity = -now.quantities[line];
          if ((now.cash + trade_cash(quantity, terms).total()).is_negative()) break;
          apply_trade(now, rows, line, quantity, terms);
          const Rational side = quantity.is_negative() ? -1 : 1;
          const Rational q = exact(quantity), close = exact(closes[line]);
          cash += floor_to_cents(-q * close * (1 + side * exact(terms.half_spread)));
          cash -= to_cents(side * q * close * exact(terms.commission));
          quantities[line] += q;
        }
      }
    }
    RC_ASSERT(exact(now.cash) == cash);
    RC_ASSERT(exact(now.quantities[0]) == quantities[0]);
    RC_ASSERT(exact(now.quantities[1]) == quantities[1]);
    RC_ASSERT(exact(net_asset_value(now, closes)) ==
              cash + quantities[0] * exact(closes[0]) + quantities[1] * exact(closes[1]));
    check_books(before, now, rows, closes_before, closes);
  }));
}

TEST_CASE("buying and selling the same returns the cash but for the costs") {
  CHECK(rc::check([] {
    const TradeTerms terms{number(1, 10000000, 4), number(0, 100, 4), number(0, 100, 4), 2};
    const Decimal quantity = number(1, 100000, 0);
    Account account{Decimal(1000000000), {Decimal()}};
    const Decimal cash_before = account.cash;
    std::vector<Row> rows;
    apply_trade(account, rows, 0, quantity, terms);
    apply_trade(account, rows, 0, -quantity, terms);
    RC_ASSERT(account.quantities[0].is_zero());
    const Rational value = exact(quantity) * exact(terms.close);
    const Rational costs = 2 * value * (exact(terms.half_spread) + exact(terms.commission));
    const Rational off = exact(cash_before) - exact(account.cash) - costs;
    // Two roundings against the book of less than a cent, two of commissions of at most half a cent.
    RC_ASSERT(off >= Rational(-1, 100));
    RC_ASSERT(off < Rational(3, 100));
    RC_ASSERT(account.cash <= cash_before);
  }));
}

TEST_CASE("a split changes no value but for the rounding of cash in lieu, at most half a cent") {
  CHECK(rc::check([] {
    const Decimal ratio = number(1, 100000, 3);
    const Decimal close = number(1, 10000000, 4);
    Account account{number(0, 100000000, 2), {number(0, 1000000, 0)}};
    const Rational before = exact(account.cash) + exact(account.quantities[0]) * exact(ratio) * exact(close);
    std::vector<Row> rows;
    apply_split(account, rows, 0, ratio, close, Decimal(1), 2);
    const Rational after = exact(net_asset_value(account, {close}));
    RC_ASSERT(abs(after - before) <= Rational(5, 1000));
    RC_ASSERT(account.quantities[0] == account.quantities[0].rounded_down(0));
  }));
}

}  // namespace
}  // namespace nightweigh::ledger

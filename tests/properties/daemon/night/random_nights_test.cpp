// Hundreds of random nights, each held against an account in exact fractions (boost::multiprecision) and a
// strategy written from its formula: what the night says of itself must be what they say.
#include <doctest/doctest.h>

#include <boost/multiprecision/cpp_int.hpp>
#include <cmath>
#include <cstdint>
#include <random>
#include <string>
#include <thread>
#include <vector>

#include "daemon/night/snapshot.h"
#include "tests/unit/daemon/night/book_for_tests.h"

namespace nightweigh::night::testing {
namespace {

using Rational = boost::multiprecision::cpp_rational;
using Integer = boost::multiprecision::cpp_int;
using Random = std::mt19937_64;

Rational exact(const Decimal& value) {
  std::string text = value.to_string();
  const bool negative = text.front() == '-';
  if (negative) text.erase(0, 1);
  Integer unit = 1;
  if (const std::size_t point = text.find('.'); point != std::string::npos) {
    for (std::size_t i = point + 1; i < text.size(); ++i) unit *= 10;
    text.erase(point, 1);
  }
  text.erase(0, std::min(text.find_first_not_of('0'), text.size() - 1));  // a leading 0 would mean octal
  return Rational(negative ? Integer(-Integer(text)) : Integer(text), unit);
}

Rational whole_part(const Rational& value) {
  return Rational(Integer(numerator(value) / denominator(value)));
}

Rational to_cents(const Rational& value) {  // half to even
  const Rational scaled = value * 100;
  Rational below = whole_part(scaled);
  if (scaled < 0 && below != scaled) below -= 1;
  const Rational rest = scaled - below;
  if (rest > Rational(1, 2) || (rest == Rational(1, 2) && Integer(numerator(below)) % 2 != 0)) below += 1;
  return below / 100;
}

Rational floor_to_cents(const Rational& value) {
  const Rational scaled = value * 100;
  Rational below = whole_part(scaled);
  if (scaled < 0 && below != scaled) below -= 1;
  return below / 100;
}

double number(const Rational& value) {
  return value.convert_to<double>();
}

struct Orders {
  std::vector<Rational> signed_quantities;  // one a line, 0 = none
};

// An account of its own, in exact fractions.
struct Model {
  Rational cash;
  std::vector<Rational> quantities;

  Rational value(const std::vector<Rational>& prices) const {
    Rational total = cash;
    for (std::size_t i = 0; i < prices.size(); ++i) total += quantities[i] * prices[i];
    return total;
  }
  std::vector<double> weights(const std::vector<Rational>& prices) const {
    const Rational total = value(prices);
    std::vector<double> out;
    for (std::size_t i = 0; i < prices.size(); ++i) out.push_back(number(quantities[i] * prices[i] / total));
    out.push_back(number(cash / total));
    return out;
  }
  void trade(std::size_t line, const Rational& quantity, const Rational& close, const LineCosts& costs) {
    const Rational side = quantity < 0 ? -1 : 1;
    cash += floor_to_cents(-quantity * close * (1 + side * exact(costs.half_spread_bp) / 10000));
    cash -= to_cents(side * quantity * close * exact(costs.commission_bp) / 10000);
    quantities[line] += quantity;
  }
};

// Exponentiated gradient and the plain rules in long double, straight from their formulas.
struct Rule {
  std::string name;
  double eta;
  std::vector<long double> weights;

  void learn(const std::vector<double>& x) {
    if (name == "constant_mix") return;
    long double portfolio = 0, total = 0;
    for (std::size_t i = 0; i < weights.size(); ++i) portfolio += weights[i] * static_cast<long double>(x[i]);
    for (std::size_t i = 0; i < weights.size(); ++i) {
      weights[i] *= name == "buy_and_hold" ? static_cast<long double>(x[i])
                                           : std::exp(eta * static_cast<long double>(x[i]) / portfolio);
      total += weights[i];
    }
    for (long double& weight : weights) weight /= total;
  }
};

BookSettings random_book(Random& random) {
  const auto pick = [&](std::vector<const char*> of) { return of[random() % of.size()]; };
  BookSettings book = harbour(pick({"constant_mix", "exponentiated_gradient", "buy_and_hold"}));
  const std::size_t lines = 1 + random() % 6;
  book.instruments.clear();
  book.costs.clear();
  for (std::size_t line = 0; line < lines; ++line) {
    book.instruments.push_back(instrument("LINE" + std::to_string(line), pick({"0", "1", "1", "10", "100"})));
    book.costs.push_back({dec(pick({"0", "2", "0.35", "10"})), dec(pick({"0", "3", "1.25", "20"}))});
  }
  book.start.cash = dec(pick({"1000000", "20000.01", "0.5", "250000000"}));
  if (random() % 2 == 0 || book.start.cash < dec("1")) {
    for (const Instrument& held : book.instruments)
      book.start.holdings[held.id] = dec(pick({"1000", "7", "333"}));
  }
  book.cash.in_mix = random() % 3 == 0;
  if (!book.cash.in_mix) book.cash.reserve = random() % 2 == 0 ? 0.0 : 0.07;
  book.cash.yearly_rate = dec(pick({"0", "0.031", "-0.005"}));
  book.strategy.eta = random() % 2 == 0 ? 0.05 : 0.4;
  book.gate.always = random() % 4 == 0;
  book.gate.extra_gain = random() % 2 == 0 ? 0.1 : 0.0;
  if (random() % 3 == 0) book.gate.payback_days_max.reset();
  book.execution_lag_nights = static_cast<int>(random() % 2);
  return book;
}

class Market {
 public:
  Market(Random& random, std::size_t lines) : random_(random) {
    for (std::size_t line = 0; line < lines; ++line)
      prices_.push_back(std::exp(1.0 + static_cast<double>(random() % 50) / 10));
  }
  std::vector<Quote> next() {
    std::student_t_distribution<double> shock(4);
    const double common = 0.008 * shock(random_);
    std::vector<Quote> out;
    for (double& price : prices_) {
      Quote quote;
      price *= std::exp(common + 0.012 * shock(random_));
      if (random_() % 40 == 0) {
        const double ratio = price > 30 ? std::vector<double>{2, 3, 1.5, 1.255}[random_() % 4] : 0.1;
        quote.split = Decimal::nearest(ratio, 3).to_string();
        price /= ratio;
      }
      if (random_() % 30 == 0) quote.dividend = Decimal::nearest(price * 0.0123, 4).to_string();
      quote.close = Decimal::nearest(std::max(price, 0.01), random_() % 4 == 0 ? 4 : 2).to_string();
      if (dec(quote.close).is_zero()) quote.close = "0.01";
      out.push_back(quote);
    }
    return out;
  }

 private:
  Random& random_;
  std::vector<double> prices_;
};

void on_the_simplex(const std::vector<double>& weights, std::size_t lines) {
  REQUIRE(weights.size() == lines);
  for (const double weight : weights) REQUIRE((weight >= 0 && weight <= 1 + 1e-12));
  REQUIRE(std::abs(sum(weights) - 1) <= 1e-12);
}

void close_to(const std::vector<double>& a, const std::vector<double>& b, double tolerance) {
  REQUIRE(a.size() == b.size());
  for (std::size_t i = 0; i < a.size(); ++i) REQUIRE(std::abs(a[i] - b[i]) <= tolerance);
}

struct Tally {
  int nights = 0, moves = 0, stays = 0, shrunk = 0, splits = 0, dividends = 0, odd_exits = 0, given_back = 0;
};

class Auditor {
 public:
  Auditor(BookSettings book, Tally& tally) : book_(std::move(book)), tally_(tally) {
    model_.quantities.assign(book_.instruments.size(), Rational());
    const std::size_t m = book_.instruments.size() + (book_.cash.in_mix ? 1 : 0);
    rule_ = {book_.strategy.rule, book_.strategy.eta,
             std::vector<long double>(m, 1.0L / static_cast<long double>(m))};
  }

  void check(const Night& night, const ClosesOfTheDay& today) {
    const Evidence& evidence = night.evidence;
    const std::size_t instruments = book_.instruments.size(), lines = instruments + 1;
    std::vector<Rational> prices;
    for (const auto& close : today.closes) prices.push_back(exact(close->close));
    const bool first = prices_.empty();

    // Corporate actions, then interest is of the cash before any of them.
    std::vector<double> relatives(lines, 1.0);
    if (first) {
      model_.cash = exact(book_.start.cash);
      for (std::size_t i = 0; i < instruments; ++i) {
        const auto held = book_.start.holdings.find(book_.instruments[i].id);
        if (held != book_.start.holdings.end()) model_.quantities[i] = exact(held->second);
      }
    } else {
      const int days = today.date.days_since(date_);
      model_.cash += to_cents(model_.cash * exact(book_.cash.yearly_rate) * days / 365);
      relatives[instruments] = number(1 + exact(book_.cash.yearly_rate) * days / 365);
      for (std::size_t i = 0; i < instruments; ++i) {
        const Rational ratio = today.closes[i]->split ? exact(*today.closes[i]->split) : Rational(1);
        const Rational dividend = today.closes[i]->dividend ? exact(*today.closes[i]->dividend) : Rational(0);
        relatives[i] = number((ratio * prices[i] + dividend) / prices_[i]);
        model_.cash += to_cents(model_.quantities[i] * dividend);
        const Rational unit = exact(book_.instruments[i].smallest_quantity());
        const Rational grown = model_.quantities[i] * ratio, kept = whole_part(grown / unit) * unit;
        model_.cash += to_cents((grown - kept) * prices[i]);
        if (ratio != 1) {
          const bool everything = pending_[i] < 0 && -pending_[i] == model_.quantities[i];
          const Rational step = lot(i), scaled = pending_[i] * ratio;
          pending_[i] = everything ? Rational(-kept) : Rational(whole_part(scaled / step) * step);
          ++tally_.splits;
        }
        tally_.dividends += dividend > 0 ? 1 : 0;
        model_.quantities[i] = kept;
      }
    }
    for (std::size_t i = 0; i < lines; ++i) {  // three roundings: two numbers to doubles, one division
      REQUIRE(std::abs(evidence.relatives[i] - relatives[i]) <= 4e-16 * relatives[i]);
    }
    REQUIRE(exact(evidence.value_before_fills) == model_.value(prices));
    close_to(evidence.held_before, model_.weights(prices), 1e-15);

    // Yesterday's sheet, from the ledger's rows: sales as ordered or all that is held; buys as ordered, or
    // shrunk where the cash was short.
    const std::vector<Rational> filled_today = fills(evidence, prices);
    const bool lag0 = book_.execution_lag_nights == 0;
    if (!lag0) settle(pending_, filled_today, prices);
    const std::vector<double> decided_from = model_.weights(prices);
    const Rational value = model_.value(prices);
    if (!lag0) close_to(evidence.held_after, decided_from, 1e-15);

    if (!first) {
      rule_.learn(relatives);
      double growth = 0;
      for (std::size_t i = 0; i < lines; ++i) growth += wanted_[i] * relatives[i];
      log_frictionless_ += std::log(growth);
    }
    std::vector<double> wanted(lines, 0.0);
    for (std::size_t i = 0; i < rule_.weights.size(); ++i) wanted[i] = static_cast<double>(rule_.weights[i]);
    if (!book_.cash.in_mix) {
      for (std::size_t i = 0; i < instruments; ++i) wanted[i] *= 1 - book_.cash.reserve;
      wanted[instruments] = book_.cash.reserve;
    }
    if (book_.strategy.rule == "buy_and_hold" && sheet_made_) wanted = decided_from;
    close_to(evidence.wanted, wanted, 1e-12);

    for (const std::vector<double>& weights : {evidence.held_before, evidence.held_after, evidence.wanted}) {
      on_the_simplex(weights, lines);
    }
    if (evidence.moves_to) on_the_simplex(*evidence.moves_to, lines);

    std::vector<Rational> ordered(instruments);
    REQUIRE(evidence.sheet.has_value() == (evidence.verdict == Verdict::move));
    if (evidence.sheet) {
      REQUIRE((evidence.sized && (evidence.sized->pays || book_.gate.always)));
      audit_sheet(*evidence.sheet, evidence, prices, value, ordered);
      sheet_made_ = true;
      ++tally_.moves;
    } else {
      REQUIRE(evidence.turnover == 0);
      REQUIRE(evidence.edges.size() == lines);
      if (evidence.sized) REQUIRE_FALSE((evidence.sized->pays || book_.gate.always));
      ++tally_.stays;
    }
    if (lag0) {
      settle(ordered, filled_today, prices);
      close_to(evidence.held_after, model_.weights(prices), 1e-15);
    } else {
      pending_ = ordered;
    }

    REQUIRE(exact(night.after.account.cash) == model_.cash);
    for (std::size_t i = 0; i < instruments; ++i)
      REQUIRE(exact(night.after.account.quantities[i]) == model_.quantities[i]);
    REQUIRE(exact(evidence.value_after) == model_.value(prices));
    REQUIRE(model_.cash >= 0);
    const double paid = -std::log(number(model_.value(prices)) / number(exact(evidence.value_before_fills)));
    REQUIRE(std::abs(evidence.cost_paid - paid) <= 1e-15);
    REQUIRE(evidence.cost_paid >= 0);
    check_record(night, prices);
    // net = what was held earned, less what was paid: exact but for cents of interest, dividends, splits.
    if (!first) {
      double growth = 0;
      for (std::size_t i = 0; i < lines; ++i) growth += held_after_[i] * relatives[i];
      const double net = std::log(number(model_.value(prices)) / number(value_after_));
      const double cents = 0.005 * static_cast<double>(2 * lines + 1) / number(value_after_);
      REQUIRE(std::abs(net - (std::log(growth) - evidence.cost_paid)) <= 1e-12 + cents);
    } else {
      opening_ = exact(night.after.opening_value);
      REQUIRE(opening_ == exact(evidence.value_before_fills));
    }
    held_after_ = evidence.held_after;
    wanted_ = evidence.wanted;
    value_after_ = model_.value(prices);
    prices_ = prices;
    date_ = today.date;
    if (pending_.empty()) pending_.assign(instruments, Rational());
    ++tally_.nights;
  }

  const BookSettings& book() const { return book_; }

 private:
  Rational lot(std::size_t line) const {
    const Instrument& instrument = book_.instruments[line];
    return exact(instrument.is_fractional() ? instrument.smallest_quantity() : instrument.lot_size);
  }

  // Signed quantities of tonight's fills, and the cash of every row against its price and costs.
  std::vector<Rational> fills(const Evidence& evidence, const std::vector<Rational>& prices) {
    std::vector<Rational> out(prices.size());
    for (const ledger::Row& row : evidence.rows) {
      if (row.cause != ledger::Cause::fill) continue;
      const Rational quantity = exact(row.quantity), side = quantity < 0 ? -1 : 1;
      const Rational price =
          prices[*row.line] * (1 + side * exact(book_.costs[*row.line].half_spread_bp) / 10000);
      REQUIRE(out[*row.line] == 0);
      REQUIRE(exact(*row.price) == price);
      REQUIRE(exact(row.cash) == floor_to_cents(-quantity * price));
      out[*row.line] = quantity;
    }
    return out;
  }

  void settle(const std::vector<Rational>& orders, const std::vector<Rational>& fills,
              const std::vector<Rational>& prices) {
    if (orders.empty()) {
      for (const Rational& fill : fills) REQUIRE(fill == 0);
      return;
    }
    Rational needed = 0;
    for (std::size_t i = 0; i < prices.size(); ++i) {
      if (orders[i] < 0) {
        const Rational sold = std::min(Rational(-orders[i]), model_.quantities[i]);
        REQUIRE(fills[i] == -sold);
        if (sold > 0) model_.trade(i, -sold, prices[i], book_.costs[i]);
      }
    }
    for (std::size_t i = 0; i < prices.size(); ++i) {
      if (!(orders[i] > 0)) continue;
      Model alone{0, std::vector<Rational>(prices.size())};
      alone.trade(i, orders[i], prices[i], book_.costs[i]);
      needed -= alone.cash;
    }
    const Rational cash = model_.cash;
    const bool short_of_cash = needed > cash;
    Rational dearest_lot = 0;
    for (std::size_t i = 0; i < prices.size(); ++i) {
      if (!(orders[i] > 0)) continue;
      if (!short_of_cash) {
        REQUIRE(fills[i] == orders[i]);
      } else {
        REQUIRE(fills[i] >= 0);
        REQUIRE(fills[i] <= orders[i]);
        // In proportion: within two lots (one of rounding down, one given back) and cents of it.
        REQUIRE(fills[i] <= orders[i] * cash / needed);
        REQUIRE(fills[i] >= orders[i] * cash / needed - 2 * lot(i) - Rational(1, 10) / prices[i]);
        REQUIRE(whole_part(fills[i] / lot(i)) * lot(i) == fills[i]);
        dearest_lot = std::max(dearest_lot, Rational(lot(i) * prices[i]));
      }
      if (fills[i] > 0) model_.trade(i, fills[i], prices[i], book_.costs[i]);
    }
    tally_.shrunk += short_of_cash ? 1 : 0;
    REQUIRE(model_.cash >= 0);
  }

  void audit_sheet(const Sheet& sheet, const Evidence& evidence, const std::vector<Rational>& prices,
                   const Rational& value, std::vector<Rational>& ordered) {
    Model after = model_;
    Rational traded = 0;
    const double nu = std::exp(-evidence.decision.worth.cost);
    REQUIRE_FALSE(sheet.orders.empty());
    bool given_back = false;
    for (const Order& order : sheet.orders) {
      const std::size_t i = order.line;
      REQUIRE(ordered[i] == 0);
      REQUIRE(order.quantity.is_positive());
      ordered[i] = exact(order.signed_quantity());
      REQUIRE(exact(order.reference_close) == prices[i]);
      const Rational amount = abs(ordered[i]);
      const bool whole_lots = whole_part(amount / lot(i)) * lot(i) == amount;
      const bool exits = !order.buy && amount == model_.quantities[i];
      REQUIRE((whole_lots || exits));
      REQUIRE((order.buy || amount <= model_.quantities[i]));
      tally_.odd_exits += whole_lots ? 0 : 1;
      // Within half a lot of the wish, unless a buy gave lots back or a sale took the rest with it.
      const double wish =
          nu * evidence.decision.move.weights[static_cast<Eigen::Index>(i)] * number(value / prices[i]) -
          number(model_.quantities[i]);
      const double off = number(ordered[i]) - wish, half = number(lot(i)) / 2 + 1e-8 + 1e-9 * std::abs(wish);
      if (order.buy) {
        REQUIRE(off <= half);
        given_back = given_back || off < -half;
      } else if (!exits) {
        REQUIRE(std::abs(off) <= half);
      } else {
        REQUIRE(off >= -2 * half);
      }
      const Rational rate =
          (exact(book_.costs[i].half_spread_bp) + exact(book_.costs[i].commission_bp)) / 10000;
      REQUIRE(exact(order.estimated_cost) == to_cents(amount * prices[i] * rate));
      traded += amount * prices[i];
      after.trade(i, ordered[i], prices[i], book_.costs[i]);
    }
    tally_.given_back += given_back ? 1 : 0;
    REQUIRE(after.cash >= 0);
    const Rational reserve =
        book_.cash.in_mix ? Rational(0) : Rational(value * exact(Decimal::nearest(book_.cash.reserve, 8)));
    REQUIRE(after.cash >= std::min(model_.cash, reserve) - Rational(1, 100));
    close_to(*evidence.moves_to, after.weights(prices), 1e-15);
    REQUIRE(std::abs(evidence.turnover - number(traded / (2 * value))) <= 1e-14);
  }

  void check_record(const Night& night, const std::vector<Rational>& prices) {
    const nlohmann::json parsed = record(night);
    REQUIRE(parsed.dump() == night.bytes);
    for (const char* minus_zero : {":-0.0,", ":-0.0}"})
      REQUIRE(night.bytes.find(minus_zero) == std::string::npos);
    const Rational opening = prices_.empty() ? exact(night.evidence.value_before_fills) : opening_;
    REQUIRE(std::abs(parsed["wealth_net"].get<double>() - number(model_.value(prices) / opening)) <=
            1e-15 * number(model_.value(prices) / opening) * 4);
    REQUIRE(parsed["wealth_frictionless"].get<double>() ==
            doctest::Approx(std::exp(log_frictionless_)).epsilon(1e-12));
    for (const char* key : {"relatives", "wanted", "held_before", "held_after"})
      REQUIRE(parsed[key].contains("CASH"));
    REQUIRE(exact(dec(parsed["account"]["net_asset_value"].get<std::string>())) == model_.value(prices));
    Rational rows = 0;
    for (const auto& row : parsed["ledger"]) rows += exact(dec(row["cash"].get<std::string>()));
    REQUIRE(rows == model_.cash - cash_before_);
    cash_before_ = model_.cash;
    // "move." / "stay." and no figure that is no number.
    const std::string reason = parsed["reason"];
    REQUIRE(reason.rfind(std::string(name_of(night.evidence.verdict)) + ".", 0) == 0);
    for (const char* word : {"nan", "inf", "-0.0 "}) REQUIRE(reason.find(word) == std::string::npos);
  }

  BookSettings book_;
  Tally& tally_;
  Model model_;
  Rule rule_;
  std::vector<Rational> prices_, pending_;
  std::vector<double> wanted_, held_after_;
  Rational value_after_, opening_, cash_before_;
  double log_frictionless_ = 0;
  bool sheet_made_ = false;
  Date date_;
};

TEST_CASE("random nights: every figure is what an independent account says") {
  Tally tally;
  for (std::uint64_t seed = 1; seed <= 60; ++seed) {
    CAPTURE(seed);
    Random random(seed);
    Auditor auditor(random_book(random), tally);
    Market market(random, auditor.book().instruments.size());
    BookState state = initial_state(auditor.book());
    for (int n = 0; n < 25; ++n) {
      CAPTURE(n);
      const ClosesOfTheDay today = closes(auditor.book(), *next_date(state, auditor.book()), market.next());
      const Night night = must_be_night(process_night(state, today, {}, auditor.book()));
      auditor.check(night, today);
      state = night.after;
    }
  }
  MESSAGE("nights " << tally.nights << ", moves " << tally.moves << ", stays " << tally.stays
                    << ", shrunk fills " << tally.shrunk << ", splits " << tally.splits << ", dividends "
                    << tally.dividends << ", odd-lot exits " << tally.odd_exits
                    << ", sheets with lots given back " << tally.given_back);
  // The run is only worth something where all of it happened.
  CHECK(tally.nights == 1500);
  CHECK(tally.moves > 100);
  CHECK(tally.stays > 100);
  CHECK(tally.shrunk > 5);
  CHECK(tally.splits > 20);
  CHECK(tally.dividends > 20);
  CHECK(tally.given_back > 5);
}

std::vector<std::string> run(std::uint64_t seed, int nights) {
  Random random(seed);
  const BookSettings book = random_book(random);
  Market market(random, book.instruments.size());
  BookState state = initial_state(book);
  std::vector<std::string> bytes;
  for (int n = 0; n < nights; ++n) {
    const ClosesOfTheDay today = closes(book, *next_date(state, book), market.next());
    Night night = must_be_night(process_night(state, today, {}, book));
    bytes.push_back(night.bytes);
    state = night.after;
    const SnapshotBytes saved = save_snapshot(state, book);
    bytes.push_back(saved.desk + saved.strategy + saved.covariation);
  }
  return bytes;
}

TEST_CASE("random nights: the same inputs give the same bits, again and from several threads at once") {
  for (std::uint64_t seed = 100; seed < 110; ++seed) {
    const std::vector<std::string> alone = run(seed, 20);
    std::vector<std::vector<std::string>> results(4);
    std::vector<std::thread> threads;
    for (std::vector<std::string>& result : results) {
      threads.emplace_back([&result, seed] { result = run(seed, 20); });
    }
    for (std::thread& thread : threads) thread.join();
    for (const std::vector<std::string>& result : results) CHECK(result == alone);
  }
}

}  // namespace
}  // namespace nightweigh::night::testing

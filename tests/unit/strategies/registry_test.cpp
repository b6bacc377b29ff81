#include "strategies/registry.h"

#include <doctest/doctest.h>

#include <algorithm>
#include <cmath>
#include <cstdint>
#include <limits>
#include <random>
#include <string>
#include <vector>

namespace nightweigh::strategies {
namespace {

struct Market {
  std::vector<std::vector<double>> relatives;
  std::vector<std::vector<std::uint8_t>> absent;

  Day day(std::size_t n) const { return {relatives[n], absent[n]}; }
  std::vector<Day> block(std::size_t from, std::size_t to) const {
    std::vector<Day> days;
    for (std::size_t n = from; n < to; ++n) days.push_back(day(n));
    return days;
  }
};

Market market(std::mt19937_64& random, std::size_t m, std::size_t days, double absent_share = 0.1) {
  std::normal_distribution<double> move(0.0, 0.03);
  std::uniform_real_distribution<double> uniform(0.0, 1.0);
  Market out;
  for (std::size_t n = 0; n < days; ++n) {
    std::vector<double> relatives(m);
    std::vector<std::uint8_t> absent(m);
    for (std::size_t i = 0; i < m; ++i) {
      relatives[i] = std::exp(move(random));
      absent[i] = uniform(random) < absent_share ? 1 : 0;
    }
    out.relatives.push_back(relatives);
    out.absent.push_back(absent);
  }
  return out;
}

std::vector<Choice> one_of_each(std::size_t m) {
  std::vector<double> weights(m, 0.0);
  for (std::size_t i = 0; i < m; ++i) weights[i] = static_cast<double>(i + 1);
  double total = 0;
  for (const double weight : weights) total += weight;
  for (double& weight : weights) weight /= total;
  return {{"exponentiated_gradient", m, 0.05, {}},
          {"exponentiated_gradient", m, 1.0, {}},
          {"constant_mix", m, 0.05, {}},
          {"constant_mix", m, 0.05, weights},
          {"buy_and_hold", m, 0.05, {}}};
}

TEST_CASE("registry: the rules by name") {
  CHECK(rules() == std::vector<std::string_view>{"exponentiated_gradient", "constant_mix", "buy_and_hold"});
  for (const std::string_view rule : rules()) {
    const auto made = make_strategy({std::string(rule), 3, 0.05, {}});
    REQUIRE(made);
    CHECK((*made)->rule() == rule);
    CHECK((*made)->size() == 3);
    CHECK((*made)->days() == 0);
  }
}

TEST_CASE("registry: an unknown rule is refused with the names of the known ones") {
  for (const char* name : {"constant", "", "Constant_mix", "exponentiated_gradient "}) {
    const auto made = make_strategy({name, 3, 0.05, {}});
    REQUIRE_FALSE(made);
    CHECK(made.error().problem == "there is no rule \"" + std::string(name) + "\"");
    CHECK(made.error().remedy == "choose one of exponentiated_gradient, constant_mix, buy_and_hold");
    CHECK_FALSE(load_strategy({name, 3, 0.05, {}}, "bytes"));
  }
}

TEST_CASE("registry: parameters outside their domain are refused") {
  const double nan = std::numeric_limits<double>::quiet_NaN();
  for (const double eta : {0.0, -0.1, 1.0000001, nan, std::numeric_limits<double>::infinity()}) {
    CHECK_FALSE(make_strategy({"exponentiated_gradient", 3, eta, {}}));
  }
  for (const std::string_view rule : rules()) CHECK_FALSE(make_strategy({std::string(rule), 0, 0.05, {}}));
  const auto mix = [](std::vector<double> weights) {
    return make_strategy({"constant_mix", 2, 0.05, std::move(weights)}).has_value();
  };
  CHECK(mix({0.3, 0.7}));
  CHECK(mix({0.0, 1.0}));
  CHECK(mix({}));
  CHECK_FALSE(mix({0.3, 0.6}));
  CHECK_FALSE(mix({0.3, 0.7 + 1e-11}));
  CHECK_FALSE(mix({-0.1, 1.1}));
  CHECK_FALSE(mix({1.0}));
  CHECK_FALSE(mix({0.3, 0.3, 0.4}));
  CHECK_FALSE(mix({nan, 1.0}));
  CHECK_FALSE(mix({nan, nan}));
}

// Response: the constants of design and published rules; constant mix 0, exponentiated gradient eta, buy and
// hold 1.
TEST_CASE("response: the share of a small drift that the wanted weights follow, measured") {
  constexpr double drift = 1e-5;
  for (const Choice& choice : one_of_each(4)) {
    const auto made = make_strategy(choice);
    REQUIRE(made);
    const std::vector<double> before = (*made)->weights();
    const std::vector<double> relatives{1 + drift, 1.0, 1 - drift, 1.0};
    const std::vector<std::uint8_t> absent(4, 0);
    double portfolio = 0;
    for (std::size_t i = 0; i < 4; ++i) portfolio += before[i] * relatives[i];
    REQUIRE((*made)->learn({relatives, absent}));
    const std::vector<double> after = (*made)->weights();
    for (const std::size_t i : {std::size_t{0}, std::size_t{2}}) {
      const double drifted = before[i] * relatives[i] / portfolio - before[i];
      CHECK((after[i] - before[i]) / drifted == doctest::Approx((*made)->response()).epsilon(1e-4));
    }
  }
}

TEST_CASE(
    "every rule: saved at any night, loaded and continued, it equals the uninterrupted run bit for bit") {
  std::mt19937_64 random(20);
  for (const std::size_t m : {1U, 2U, 3U, 9U, 40U}) {
    for (const Choice& choice : one_of_each(m)) {
      CAPTURE(choice.canonical_text());
      const Market days = market(random, m, 60);
      auto whole = std::move(*make_strategy(choice));
      auto resumed = std::move(*make_strategy(choice));
      for (std::size_t n = 0; n < days.relatives.size(); ++n) {
        REQUIRE(whole->learn(days.day(n)));
        auto loaded = load_strategy(choice, resumed->save());
        REQUIRE(loaded);
        resumed = std::move(*loaded);
        REQUIRE(resumed->learn(days.day(n)));
        REQUIRE(resumed->save() == whole->save());
        REQUIRE(resumed->weights() == whole->weights());
        REQUIRE(resumed->numerical_error() == whole->numerical_error());
        REQUIRE(resumed->days() == n + 1);
      }
    }
  }
}

TEST_CASE("every rule: a block of days equals the days one by one, bit for bit, however it is cut") {
  std::mt19937_64 random(21);
  for (const Choice& choice : one_of_each(7)) {
    const Market days = market(random, 7, 50);
    auto single = std::move(*make_strategy(choice));
    for (std::size_t n = 0; n < 50; ++n) REQUIRE(single->learn(days.day(n)));
    for (const std::size_t cut : {1U, 3U, 16U, 49U, 50U}) {
      auto blocks = std::move(*make_strategy(choice));
      for (std::size_t n = 0; n < 50; n += cut)
        REQUIRE(blocks->learn_block(days.block(n, std::min<std::size_t>(n + cut, 50))));
      CHECK(blocks->save() == single->save());
    }
  }
}

TEST_CASE("every rule: a refused day in a block is named, and the days before it are learned") {
  std::mt19937_64 random(22);
  for (const Choice& choice : one_of_each(3)) {
    Market days = market(random, 3, 6, 0.0);
    days.relatives[4] = {1.0, -1.0, 1.0};
    auto block = std::move(*make_strategy(choice));
    auto single = std::move(*make_strategy(choice));
    const Outcome<void> learned = block->learn_block(days.block(0, 6));
    REQUIRE_FALSE(learned);
    CHECK(learned.error().problem == "day 4 of the block: the relative of line 1 is -1.000000");
    for (std::size_t n = 0; n < 4; ++n) REQUIRE(single->learn(days.day(n)));
    CHECK(block->save() == single->save());
  }
}

TEST_CASE("every rule: refused days leave the state's bytes and the weights unchanged") {
  std::mt19937_64 random(23);
  const double nan = std::numeric_limits<double>::quiet_NaN(),
               infinity = std::numeric_limits<double>::infinity();
  const std::vector<std::vector<double>> bad = {
      {nan, 1, 1}, {1, infinity, 1}, {1, 1, -0.5}, {0, 0, 0}, {1, 1}, {1, 1, 1, 1}, {}, {-infinity, 1, 1}};
  for (const Choice& choice : one_of_each(3)) {
    const Market days = market(random, 3, 5);
    auto strategy = std::move(*make_strategy(choice));
    for (std::size_t n = 0; n < 5; ++n) REQUIRE(strategy->learn(days.day(n)));
    const std::string before = strategy->save();
    const std::vector<double> weights = strategy->weights();
    for (const std::vector<double>& relatives : bad) {
      const std::vector<std::uint8_t> absent(relatives.size(), 0);
      CHECK_FALSE(strategy->learn({relatives, absent}));
      CHECK(strategy->save() == before);
      CHECK(strategy->weights() == weights);
    }
    const std::vector<double> good(3, 1.0);
    const std::vector<std::uint8_t> short_marks(2, 0);
    CHECK_FALSE(strategy->learn({good, short_marks}));
    CHECK(strategy->save() == before);
  }
}

TEST_CASE("every rule: altered, truncated and foreign bytes are refused") {
  std::mt19937_64 random(24);
  const std::vector<Choice> choices = one_of_each(3);
  const Market days = market(random, 3, 5);
  for (const Choice& choice : choices) {
    auto strategy = std::move(*make_strategy(choice));
    for (std::size_t n = 0; n < 5; ++n) REQUIRE(strategy->learn(days.day(n)));
    const std::string bytes = strategy->save();
    for (std::size_t at = 0; at < bytes.size(); ++at) {
      std::string altered = bytes;
      altered[at] = static_cast<char>(altered[at] ^ (1 << (at % 8)));
      CHECK_FALSE(load_strategy(choice, altered));
      CHECK_FALSE(load_strategy(choice, std::string_view(bytes).substr(0, at)));
    }
    for (const Choice& other : choices) {
      if (other.canonical_text() != choice.canonical_text()) CHECK_FALSE(load_strategy(other, bytes));
    }
    Choice wider = choice;
    wider.m = 4;
    wider.weights.clear();
    CHECK_FALSE(load_strategy(wider, bytes));
  }
}

TEST_CASE(
    "every rule: weights stand on the simplex with the stated error beside them, clones go their own way") {
  std::mt19937_64 random(25);
  for (const Choice& choice : one_of_each(6)) {
    const Market days = market(random, 6, 300);
    auto strategy = std::move(*make_strategy(choice));
    for (std::size_t n = 0; n < 300; ++n) {
      REQUIRE(strategy->learn(days.day(n)));
      double total = 0;
      for (const double weight : strategy->weights()) {
        REQUIRE(weight >= 0);
        total += weight;
      }
      REQUIRE(std::abs(total - 1) <= 1e-12);
      for (const double error : strategy->numerical_error()) REQUIRE((error >= 0 && error < 1e-9));
    }
    const std::string before = strategy->save();
    const auto copy = strategy->clone();
    REQUIRE(copy->learn(days.day(0)));
    CHECK(strategy->save() == before);
    CHECK(copy->days() == 301);
  }
}

}  // namespace
}  // namespace nightweigh::strategies

#include <doctest/doctest.h>

#include <cmath>
#include <cstdint>
#include <limits>
#include <memory>
#include <random>
#include <vector>

#include "strategies/plain/buy_and_hold.h"
#include "strategies/plain/constant_mix.h"

namespace nightweigh::strategies {
namespace {

std::unique_ptr<Strategy> holding(std::size_t m) {
  return std::move(*BuyAndHold::make({"buy_and_hold", m, 0.05, {}}));
}

void learn(Strategy& strategy, const std::vector<double>& relatives) {
  const std::vector<std::uint8_t> absent(relatives.size(), 0);
  REQUIRE(strategy.learn({relatives, absent}));
}

TEST_CASE("constant mix: the weights it was given, whatever happens") {
  const auto given = std::move(*ConstantMix::make({"constant_mix", 3, 0.05, {0.5, 0.3, 0.2}}));
  const auto equal = std::move(*ConstantMix::make({"constant_mix", 3, 0.05, {}}));
  learn(*given, {2.0, 0.5, 0.0});
  learn(*equal, {2.0, 0.5, 0.0});
  CHECK(given->weights() == std::vector<double>{0.5, 0.3, 0.2});
  CHECK(equal->weights() == std::vector<double>(3, 1.0 / 3.0));
  CHECK(given->numerical_error() == std::vector<double>(3, 0.0));
  CHECK(given->days() == 1);
}

// Closed form, by definition: what one unit of money in each line has become, as shares.
TEST_CASE("buy and hold: weights proportional to the products of the relatives") {
  std::mt19937_64 random(40);
  std::normal_distribution<double> move(0.0, 0.03);
  const auto strategy = holding(6);
  std::vector<long double> grown(6, 1.0L);
  for (int day = 0; day < 5000; ++day) {
    std::vector<double> x(6);
    for (std::size_t i = 0; i < 6; ++i) {
      x[i] = std::exp(move(random));
      grown[i] *= static_cast<long double>(x[i]);
    }
    learn(*strategy, x);
    long double total = 0;
    for (const long double value : grown) total += value;
    const std::vector<double> weights = strategy->weights(), stated = strategy->numerical_error();
    for (std::size_t i = 0; i < 6; ++i) {
      const double off =
          static_cast<double>(std::abs(static_cast<long double>(weights[i]) - grown[i] / total));
      REQUIRE(off <= stated[i]);
      REQUIRE(stated[i] < 1e-10);
    }
  }
}

TEST_CASE("buy and hold: worked cases") {
  const auto strategy = holding(2);
  learn(*strategy, {2.0, 0.5});
  CHECK(strategy->weights() == std::vector<double>{0.8, 0.2});
  learn(*strategy, {0.0, 1.0});  // a total loss is final
  CHECK(strategy->weights() == std::vector<double>{0.0, 1.0});
  learn(*strategy, {3.0, 1.0});
  CHECK(strategy->weights() == std::vector<double>{0.0, 1.0});

  // The only line with weight loses everything: nothing is left to hold, and the day is refused.
  const std::string before = strategy->save();
  const std::vector<double> x{1.0, 0.0};
  const std::vector<std::uint8_t> absent{0, 0};
  const Outcome<void> learned = strategy->learn({x, absent});
  REQUIRE_FALSE(learned);
  CHECK(learned.error().problem == "the portfolio's return that day is 0.000000");
  CHECK(strategy->save() == before);
}

TEST_CASE("buy and hold: an absent line keeps its weight, the others move among themselves") {
  const auto strategy = holding(4);
  const std::vector<double> x{2.0, std::numeric_limits<double>::quiet_NaN(), 1.0, 0.5};
  const std::vector<std::uint8_t> absent{0, 1, 0, 0};
  REQUIRE(strategy->learn({x, absent}));
  const std::vector<double> weights = strategy->weights();
  CHECK(weights[1] == doctest::Approx(0.25).epsilon(1e-15));
  CHECK(weights[0] == doctest::Approx(0.75 * 2.0 / 3.5).epsilon(1e-15));
  CHECK(weights[3] == doctest::Approx(0.75 * 0.5 / 3.5).epsilon(1e-15));

  // Every line with weight absent: nothing moves, the day counts.
  const auto corner = holding(2);
  learn(*corner, {1.0, 0.0});
  const std::vector<double> y{1.0, 1.5};
  const std::vector<std::uint8_t> first_absent{1, 0};
  REQUIRE(corner->learn({y, first_absent}));
  CHECK(corner->weights() == std::vector<double>{1.0, 0.0});
  CHECK(corner->days() == 2);
}

TEST_CASE("buy and hold: relatives of any scale stay finite, or are refused whole") {
  const auto strategy = holding(2);
  learn(*strategy, {1e300, 1e300});
  CHECK(strategy->weights() == std::vector<double>{0.5, 0.5});
  learn(*strategy, {1e-300, 1e-300});
  CHECK(strategy->weights() == std::vector<double>{0.5, 0.5});
  const double most = std::numeric_limits<double>::max();
  const std::vector<double> x{most, most};
  const std::vector<std::uint8_t> absent{0, 0};
  if (strategy->learn({x, absent})) {
    for (const double weight : strategy->weights()) CHECK(std::isfinite(weight));
  }
}

}  // namespace
}  // namespace nightweigh::strategies

#include "strategies/exponentiated_gradient/exponentiated_gradient.h"

#include <doctest/doctest.h>

#include <algorithm>
#include <cmath>
#include <cstdint>
#include <memory>
#include <random>
#include <vector>

#include "strategies/interface/state_bytes.h"

namespace nightweigh::strategies {
namespace {

std::unique_ptr<Strategy> gradient(std::size_t m, double eta) {
  return std::move(*ExponentiatedGradient::make({"exponentiated_gradient", m, eta, {}}));
}

void learn(Strategy& strategy, const std::vector<double>& relatives) {
  const std::vector<std::uint8_t> absent(relatives.size(), 0);
  REQUIRE(strategy.learn({relatives, absent}));
}

std::vector<double> random_day(std::mt19937_64& random, std::size_t m, double sigma) {
  std::normal_distribution<double> move(0.0, sigma);
  std::vector<double> out(m);
  for (double& relative : out) relative = std::exp(move(random));
  return out;
}

// The rule is w_i <- w_i exp(eta x_i / (w.x)) / Z of Helmbold, Schapire, Singer and Warmuth (Mathematical
// Finance 8, 1998, 325-347); the figures were computed from it in plain double arithmetic by another program.
TEST_CASE("exponentiated gradient: worked example, two lines") {
  const auto strategy = gradient(2, 0.05);
  CHECK(strategy->weights() == std::vector<double>{0.5, 0.5});
  learn(*strategy, {1.0, 2.0});
  CHECK(std::abs(strategy->weights()[1] - 0.5083325618141192) < 1e-15);
  learn(*strategy, {1.0, 0.5});
  CHECK(std::abs(strategy->weights()[0] - 0.5000465506) < 5e-11);
  CHECK(std::abs(strategy->weights()[1] - 0.4999534494) < 5e-11);
}

// From (0.2, 0.3, 0.5) with x = (1.02, 0.99, 1): (0.2001898730626, 0.2998351693342, 0.4999749576031), same
// source. The rule starts at equal weights, so the state is written: logarithms of the weights, largest 0.
TEST_CASE("exponentiated gradient: worked example, three lines, from given weights") {
  const std::vector<double> from{0.2, 0.3, 0.5};
  const Choice choice{"exponentiated_gradient", 3, 0.05, {}};
  const std::vector<double> values{std::log(0.4), std::log(0.6), 0.0, 0.0};
  StateBytes state{exponentiated_gradient_format, choice.rule, 3, choice.digest(), 0, values};
  state.values.resize(std::max<std::size_t>(read_state(gradient(3, 0.05)->save())->values.size(), 4), 0.0);
  auto loaded = ExponentiatedGradient::load(choice, write_state(state));
  REQUIRE(loaded);
  for (std::size_t i = 0; i < 3; ++i) REQUIRE(std::abs((*loaded)->weights()[i] - from[i]) < 1e-16);
  learn(**loaded, {1.02, 0.99, 1.0});
  CHECK(std::abs((*loaded)->weights()[0] - 0.2001898730626) < 1e-13);
  CHECK(std::abs((*loaded)->weights()[1] - 0.2998351693342) < 1e-13);
  CHECK(std::abs((*loaded)->weights()[2] - 0.4999749576031) < 1e-13);
}

TEST_CASE("exponentiated gradient: closed cases") {
  SUBCASE("one line has weight 1 for ever") {
    const auto strategy = gradient(1, 0.3);
    learn(*strategy, {0.7});
    CHECK(strategy->weights() == std::vector<double>{1.0});
  }
  SUBCASE("equal relatives move nothing, bit for bit") {
    const auto strategy = gradient(3, 0.05);
    learn(*strategy, {1.1, 0.9, 1.0});
    const std::vector<double> before = strategy->weights();
    learn(*strategy, {1.25, 1.25, 1.25});
    for (std::size_t i = 0; i < 3; ++i) CHECK(std::abs(strategy->weights()[i] - before[i]) < 1e-15);
  }
  SUBCASE("first day in closed form: weights proportional to exp(eta x_i / mean x)") {
    const auto strategy = gradient(4, 0.2);
    const std::vector<double> x{0.5, 1.0, 1.5, 3.0};  // mean 1.5
    learn(*strategy, x);
    double total = 0;
    for (const double relative : x) total += std::exp(0.2 * relative / 1.5);
    for (std::size_t i = 0; i < 4; ++i) {
      CHECK(std::abs(strategy->weights()[i] - std::exp(0.2 * x[i] / 1.5) / total) < 1e-15);
    }
  }
  SUBCASE("a total loss keeps a weight above 0, and the line can come back") {
    const auto strategy = gradient(2, 1.0);
    learn(*strategy, {0.0, 1.0});
    CHECK(strategy->weights()[0] == doctest::Approx(1 / (1 + std::exp(2.0))).epsilon(1e-14));
    for (int day = 0; day < 20; ++day) learn(*strategy, {1.0, 0.0});
    CHECK(strategy->weights()[0] > 0.99);
  }
  SUBCASE("a weight that left the range of doubles comes back") {
    // 2000 days of total loss take the first weight to exp(-2000) and below: 0 as a double, but not in the
    // logarithm; a portfolio without the other line then is not learned as a division by 0.
    const auto strategy = gradient(2, 1.0);
    for (int day = 0; day < 2000; ++day) learn(*strategy, {0.0, 1.0});
    CHECK(strategy->weights()[0] == 0.0);
    const std::vector<double> relatives{1.02, 1.0};
    const std::vector<std::uint8_t> absent{0, 1};
    REQUIRE(strategy->learn({relatives, absent}));
    CHECK(strategy->weights()[1] == 1.0);
  }
}

TEST_CASE("exponentiated gradient: lines in another order give the same weights in that order") {
  std::mt19937_64 random(30);
  const std::vector<std::size_t> order{3, 0, 4, 1, 2};
  const auto plain = gradient(5, 0.1), permuted = gradient(5, 0.1);
  for (int day = 0; day < 500; ++day) {
    const std::vector<double> x = random_day(random, 5, 0.03);
    std::vector<double> y(5);
    for (std::size_t i = 0; i < 5; ++i) y[i] = x[order[i]];
    learn(*plain, x);
    learn(*permuted, y);
  }
  for (std::size_t i = 0; i < 5; ++i)
    CHECK(std::abs(permuted->weights()[i] - plain->weights()[order[i]]) < 1e-13);
}

TEST_CASE("exponentiated gradient: scaling all of a day's relatives changes nothing") {
  std::mt19937_64 random(31);
  const auto plain = gradient(5, 0.1), doubled = gradient(5, 0.1), scaled = gradient(5, 0.1);
  std::uniform_real_distribution<double> factor(0.1, 10.0);
  for (int day = 0; day < 500; ++day) {
    std::vector<double> x = random_day(random, 5, 0.03);
    learn(*plain, x);
    const double power = std::ldexp(1.0, static_cast<int>(random() % 9) - 4);
    std::vector<double> y = x;
    for (double& relative : y) relative *= power;
    learn(*doubled, y);
    const double any = factor(random);
    for (double& relative : x) relative *= any;
    learn(*scaled, x);
  }
  CHECK(doubled->save() == plain->save());  // a power of two rounds nothing
  for (std::size_t i = 0; i < 5; ++i) CHECK(std::abs(scaled->weights()[i] - plain->weights()[i]) < 1e-13);
}

TEST_CASE("exponentiated gradient: a line that is always absent might as well not be there") {
  std::mt19937_64 random(32);
  const auto with = gradient(4, 0.1), without = gradient(3, 0.1);
  for (int day = 0; day < 300; ++day) {
    const std::vector<double> x = random_day(random, 3, 0.03);
    const std::vector<double> wide{x[0], std::nan(""), x[1], x[2]};
    const std::vector<std::uint8_t> absent{0, 1, 0, 0};
    REQUIRE(with->learn({wide, absent}));
    learn(*without, x);
  }
  const std::vector<double> w = with->weights();
  const double rest = w[0] + w[2] + w[3];
  const std::vector<double> cut{w[0] / rest, w[2] / rest, w[3] / rest};
  for (std::size_t i = 0; i < 3; ++i) CHECK(std::abs(cut[i] - without->weights()[i]) < 1e-14);
}

TEST_CASE("exponentiated gradient: a day on which nothing is present changes no weight") {
  const auto strategy = gradient(3, 0.1);
  learn(*strategy, {1.1, 0.9, 1.0});
  const std::vector<double> before = strategy->weights();
  const std::vector<double> relatives(3, 1.0);
  const std::vector<std::uint8_t> absent(3, 1);
  REQUIRE(strategy->learn({relatives, absent}));
  for (std::size_t i = 0; i < 3; ++i) CHECK(std::abs(strategy->weights()[i] - before[i]) < 1e-15);
}

// The same rule in long double (64-bit mantissa on x86-64), straight from the formula: weights multiplied
// and normalised, no logarithms kept. Its own error is a thousandth of what is looked for.
struct Reference {
  std::vector<long double> weights;
  long double eta;

  Reference(std::size_t m, double rate) : weights(m, 1.0L / static_cast<long double>(m)), eta(rate) {}

  void learn(const std::vector<double>& x) {
    long double portfolio = 0;
    for (std::size_t i = 0; i < x.size(); ++i) portfolio += weights[i] * static_cast<long double>(x[i]);
    long double total = 0;
    for (std::size_t i = 0; i < x.size(); ++i) {
      weights[i] *= std::exp(eta * static_cast<long double>(x[i]) / portfolio);
      total += weights[i];
    }
    for (long double& weight : weights) weight /= total;
  }
};

TEST_CASE("exponentiated gradient: the stated error covers the distance to a long double run") {
  struct Case {
    std::size_t m;
    double eta, sigma;
  };
  std::mt19937_64 random(33);
  for (const Case& c : {Case{2, 0.05, 0.02}, Case{10, 0.05, 0.02}, Case{10, 0.05, 0.1}, Case{40, 1.0, 0.05},
                        Case{3, 1.0, 0.5}, Case{5, 0.02, 1.0}}) {
    CAPTURE(c.m);
    CAPTURE(c.eta);
    CAPTURE(c.sigma);
    const auto strategy = gradient(c.m, c.eta);
    Reference reference(c.m, c.eta);
    double worst_share = 0;
    for (int day = 0; day < 5000; ++day) {
      std::vector<double> x = random_day(random, c.m, c.sigma);
      x[0] *= 1 + c.sigma * 0.05;  // one line pulls away, so that some weights become very small
      learn(*strategy, x);
      reference.learn(x);
      const std::vector<double> weights = strategy->weights(), stated = strategy->numerical_error();
      for (std::size_t i = 0; i < c.m; ++i) {
        const double off =
            static_cast<double>(std::abs(static_cast<long double>(weights[i]) - reference.weights[i]));
        REQUIRE(off <= stated[i]);
        worst_share = std::max(worst_share, off / stated[i]);
      }
    }
    MESSAGE("largest share of the stated error used: " << worst_share);
    CHECK(worst_share > 1e-5);  // a statement that is never near the truth says nothing
    for (const double stated : strategy->numerical_error()) CHECK(stated < 1e-9);
  }
}

// Constant relatives add the same number every day: the rounding goes to one side for as long as the
// logarithm stays in one binade, so that the errors add up instead of cancelling.
TEST_CASE("exponentiated gradient: the stated error covers roundings that all go one way") {
  for (const double low : {0.37, 0.9, 0.999, 0.05}) {
    for (const double eta : {0.05, 0.3}) {
      CAPTURE(low);
      CAPTURE(eta);
      const auto strategy = gradient(2, eta);
      Reference reference(2, eta);
      for (int day = 0; day < 2000; ++day) {
        learn(*strategy, {low, 1.0});
        reference.learn({low, 1.0});
        const double off = static_cast<double>(
            std::abs(static_cast<long double>(strategy->weights()[0]) - reference.weights[0]));
        REQUIRE(off <= strategy->numerical_error()[0]);
      }
    }
  }
}

TEST_CASE("exponentiated gradient: an absurd day is refused whole or leaves everything finite") {
  for (const double huge : {1e46, 1e150, 1e300, 1.7e308}) {
    const auto strategy = gradient(3, 1.0);
    const std::vector<std::uint8_t> absent(3, 0);
    for (const std::vector<double>& x :
         {std::vector<double>{huge, 1.0, 1e-300}, std::vector<double>{1e-300, huge, 1.0},
          std::vector<double>{1.0, 1e-300, huge}, std::vector<double>{huge, huge, 0.0}}) {
      const std::string before = strategy->save();
      if (!strategy->learn({x, absent})) CHECK(strategy->save() == before);
      for (const double weight : strategy->weights()) CHECK(std::isfinite(weight));
      for (const double error : strategy->numerical_error()) CHECK(std::isfinite(error));
      CHECK(ExponentiatedGradient::load({"exponentiated_gradient", 3, 1.0, {}}, strategy->save()));
    }
  }
}

}  // namespace
}  // namespace nightweigh::strategies

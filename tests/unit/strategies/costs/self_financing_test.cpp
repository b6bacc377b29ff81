#include "strategies/costs/self_financing.h"

#include <doctest/doctest.h>

#include <algorithm>
#include <cmath>
#include <random>
#include <stdexcept>
#include <vector>

namespace {

using nightweigh::costs::log_cost_of_loss;
using nightweigh::costs::Proportional;
using nightweigh::costs::self_financing_factor;
using nightweigh::costs::self_financing_loss;
using Values = std::vector<double>;

Proportional same(Values cost) {
  return {cost, cost};
}

// The equation itself, for a check by halving, in long double.
long double excess(long double nu, const Values& a, const Values& w, const Proportional& costs, double fees) {
  long double left = nu - 1.0L + fees;
  for (std::size_t i = 0; i < a.size(); ++i) {
    const long double bought = nu * w[i] - a[i];
    left += bought > 0 ? costs.buy[i] * bought : costs.sell[i] * -bought;
  }
  return left;
}

long double by_halving(const Values& a, const Values& w, const Proportional& costs, double fees) {
  long double low = -2.0L;
  long double high = 1.0L;
  for (int k = 0; k < 200; ++k) {
    const long double middle = (low + high) / 2;
    (excess(middle, a, w, costs, fees) < 0 ? low : high) = middle;
  }
  return (low + high) / 2;
}

Values random_simplex(std::mt19937_64& random, std::size_t m) {
  std::exponential_distribution<double> share;
  std::bernoulli_distribution zero(0.2);
  Values out(m);
  double total = 0;
  for (double& value : out) {
    value = zero(random) ? 0.0 : share(random);
    total += value;
  }
  if (total == 0) {
    out[0] = total = 1;
  }
  for (double& value : out) {
    value /= total;
  }
  return out;
}

}  // namespace

// Values worked out by hand from the equation of Gyorfi and Vajda (ALT 2008) and of Iyengar and Cover (2000).
TEST_CASE("the factor equals the equation's exact roots") {
  const Values two{2.0 / 3.0, 1.0 / 3.0};
  const Values half{0.5, 0.5};
  // 1 % on both sides: what is sold is what is bought at nu = 1 - 0.01/3.
  CHECK(self_financing_factor(two, half, same({0.01, 0.01})) ==
        doctest::Approx(1.0 - 0.01 / 3.0).epsilon(1e-15));
  // 1 % on purchases only.
  CHECK(self_financing_factor(two, half, {{0.01, 0.01}, {0.0, 0.0}}) ==
        doctest::Approx((1.0 + 0.01 / 3.0) / 1.005).epsilon(1e-15));
  // All cash to half stock at 10 bp; cash itself is free.
  CHECK(self_financing_factor(Values{0.0, 1.0}, half, same({0.001, 0.0})) ==
        doctest::Approx(1.0 / 1.0005).epsilon(1e-15));
  // Three lines, 15 bp to buy, 10 bp to sell.
  CHECK(self_financing_factor(Values{0.4, 0.35, 0.25}, Values{0.3, 0.3, 0.4},
                              {{0.0015, 0.0015, 0.0015}, {0.001, 0.001, 0.001}}) ==
        doctest::Approx(0.999625).epsilon(1e-14));
}

TEST_CASE("no move and no fee leave the wealth as it was, to the bit") {
  const Values a{0.1, 0.2, 0.7};
  CHECK(self_financing_factor(a, a, same({0.01, 0.02, 0.03})) == 1.0);
  CHECK(self_financing_loss(a, a, same({0.01, 0.02, 0.03})) == 0.0);
  // A fee alone makes every line smaller, and that is a sale.
  const double nu = self_financing_factor(a, a, same({0.01, 0.01, 0.01}), 0.001);
  CHECK(nu == doctest::Approx(1.0 - 0.001 / 0.99).epsilon(1e-15));
}

TEST_CASE("the factor meets the equation on random books, fees and kinks included") {
  std::mt19937_64 random(20240611);
  std::uniform_real_distribution<double> cost(0.0, 0.3);
  double worst = 0;
  double worst_loss = 0;
  for (int run = 0; run < 2000; ++run) {
    const std::size_t m = 1 + random() % 12;
    const Values a = random_simplex(random, m);
    Values w = random_simplex(random, m);
    if (run % 3 == 0) {
      // Nearly the same weights: small losses, roots next to the kinks.
      for (std::size_t i = 0; i < m; ++i) {
        w[i] = a[i] + 1e-6 * (w[i] - a[i]);
      }
    }
    Proportional costs;
    for (std::size_t i = 0; i < m; ++i) {
      costs.buy.push_back(random() % 4 == 0 ? 0.0 : cost(random));
      costs.sell.push_back(random() % 4 == 0 ? 0.0 : cost(random));
    }
    const double fees = run % 2 == 0 ? 0.0 : 0.01 * cost(random);
    const long double root = by_halving(a, w, costs, fees);
    worst = std::max(worst, static_cast<double>(std::abs(self_financing_factor(a, w, costs, fees) - root)));
    const double loss = self_financing_loss(a, w, costs, fees);
    // Weights sum to 1 only within rounding, and that rounding is in the root.
    worst_loss = std::max(worst_loss, static_cast<double>(std::abs(loss - (1.0L - root))));
  }
  MESSAGE("largest distance from the root found by halving: ", worst, ", of the loss: ", worst_loss);
  CHECK(worst < 1e-15);
  CHECK(worst_loss < 1e-15);
}

TEST_CASE("a small move's loss keeps its digits") {
  // 1e-9 of the book from one line to another at 10 bp a side: the loss is 2e-12 to first order, of which a
  // plain 1 - nu would keep four digits.
  const Values a{0.5, 0.5};
  const Values w{0.5 + 1e-9, 0.5 - 1e-9};
  const double moved = (w[0] - a[0]) + (a[1] - w[1]);
  const double loss = self_financing_loss(a, w, same({0.001, 0.001}));
  CHECK(std::abs(loss - 0.001 * moved) < 1e-11 * loss);
}

TEST_CASE("fees beyond the wealth show as a factor of at most 0") {
  const Values a{0.5, 0.5};
  const Values w{0.25, 0.75};
  CHECK(self_financing_factor(a, w, same({0.01, 0.01}), 1.5) < 0.0);
  CHECK(self_financing_factor(a, w, same({0.01, 0.01}), 0.5) > 0.0);
  const double nu = self_financing_factor(a, w, same({0.01, 0.02}), 1.5);
  CHECK(std::abs(excess(nu, a, w, same({0.01, 0.02}), 1.5)) < 1e-15L);
}

TEST_CASE("one line, and lines of weight 0") {
  CHECK(self_financing_factor(Values{1.0}, Values{1.0}, same({0.01})) == 1.0);
  // Out of a line altogether, into a new one.
  CHECK(self_financing_factor(Values{1.0, 0.0, 0.0}, Values{0.0, 1.0, 0.0}, same({0.01, 0.02, 0.5})) ==
        doctest::Approx(0.99 / 1.02).epsilon(1e-15));
}

TEST_CASE("sizes that differ are a bug of the caller") {
  CHECK_THROWS_AS(self_financing_factor(Values{1.0}, Values{0.5, 0.5}, same({0.0, 0.0})), std::logic_error);
  CHECK_THROWS_AS(self_financing_factor(Values{0.5, 0.5}, Values{0.5, 0.5}, same({0.0})), std::logic_error);
}

TEST_CASE("the logarithm of a loss against long double") {
  for (double loss = 1e-18; loss < 0.999; loss *= 1.37) {
    const long double exact = -log1pl(-static_cast<long double>(loss));
    // Above 2^-8 the rounding of 1 - loss is in it.
    CHECK(std::abs(log_cost_of_loss(loss) - exact) <= (loss > 0x1p-8 ? 2e-14L : 4e-16L) * exact);
  }
  CHECK(log_cost_of_loss(0.0) == 0.0);
  CHECK(std::isinf(log_cost_of_loss(1.0)));
}

// The published bound of exponentiated gradient, pathwise: with each day's relatives scaled so that the
// largest is 1 and r the smallest of them all, ln wealth >= ln wealth of the best constant mix - ln(m)/eta -
// eta n / (8 r^2) (Helmbold, Schapire, Singer, Warmuth, Mathematical Finance 8, 1998; the constant from
// memory, and rederived: Hoeffding's lemma on gradients in [r', 1/r]).
//
// The best constant mix is found by Cover's iteration b_i <- b_i mean(x_i/(b.x)) (Cover, IEEE Trans. Inform.
// Theory 30, 1984), slow and independent of anything here; what is missing to the optimum is at most
// n ln max_i mean(x_i/(b.x)), by Jensen's inequality.
#include <doctest/doctest.h>

#include <algorithm>
#include <cmath>
#include <cstdint>
#include <functional>
#include <memory>
#include <random>
#include <vector>

#include "strategies/exponentiated_gradient/exponentiated_gradient.h"

namespace nightweigh::strategies {
namespace {

using Days = std::vector<std::vector<double>>;

double dot(const std::vector<double>& a, const std::vector<double>& b) {
  double total = 0;
  for (std::size_t i = 0; i < a.size(); ++i) total += a[i] * b[i];
  return total;
}

// An upper bound of the best constant mix's log wealth, within `slack` of a mix that attains it.
struct Hindsight {
  double log_wealth_at_most = 0;
  double slack = 0;
};

Hindsight best_constant_mix(const Days& days) {
  const std::size_t m = days.front().size();
  std::vector<double> mix(m, 1.0 / static_cast<double>(m));
  Hindsight best;
  for (int step = 0; step < 400; ++step) {
    double log_wealth = 0;
    std::vector<double> mean(m, 0.0);
    for (const std::vector<double>& x : days) {
      const double portfolio = dot(mix, x);
      log_wealth += std::log(portfolio);
      for (std::size_t i = 0; i < m; ++i) mean[i] += x[i] / portfolio / static_cast<double>(days.size());
    }
    best.slack = static_cast<double>(days.size()) * std::log(*std::max_element(mean.begin(), mean.end()));
    best.log_wealth_at_most = log_wealth + best.slack;
    if (best.slack < 1e-6) break;
    for (std::size_t i = 0; i < m; ++i) mix[i] *= mean[i];
  }
  return best;
}

// Makes the next day from the weights that are wanted for it: an adversary may look.
using Maker = std::function<std::vector<double>(const std::vector<double>& weights)>;

struct Run {
  double regret = 0, bound = 0, slack = 0;
};

Run run(std::size_t m, double eta, int n, const Maker& make) {
  const auto strategy = std::move(*ExponentiatedGradient::make({"exponentiated_gradient", m, eta, {}}));
  Days days;
  double log_wealth = 0, smallest = 1;
  for (int day = 0; day < n; ++day) {
    std::vector<double> x = make(strategy->weights());
    const double largest = *std::max_element(x.begin(), x.end());
    for (double& relative : x) relative /= largest;
    smallest = std::min(smallest, *std::min_element(x.begin(), x.end()));
    log_wealth += std::log(dot(strategy->weights(), x));
    const std::vector<std::uint8_t> absent(m, 0);
    REQUIRE(strategy->learn({x, absent}));
    days.push_back(std::move(x));
  }
  const Hindsight best = best_constant_mix(days);
  Run out;
  out.slack = best.slack;
  out.regret = best.log_wealth_at_most - log_wealth;
  out.bound = std::log(static_cast<double>(m)) / eta + eta * n / (8 * smallest * smallest);
  return out;
}

// `log_wealth_at_most` overstates the best mix by at most the slack, so a regret beyond the bound by less
// than the slack proves nothing: it is given back. The slack is small beside the bound (checked).
void check(const Run& result) {
  CHECK(result.regret - result.slack <= result.bound);
  CHECK(result.slack <= 0.1 * result.bound);
}

TEST_CASE("published bound: random markets") {
  std::mt19937_64 random(50);
  for (const std::size_t m : {2U, 5U, 12U}) {
    for (const double eta : {0.01, 0.05, 0.3, 1.0}) {
      for (const double sigma : {0.01, 0.05, 0.3}) {
        std::normal_distribution<double> move(0.0, sigma);
        CAPTURE(m);
        CAPTURE(eta);
        CAPTURE(sigma);
        const Run result = run(m, eta, 400, [&](const std::vector<double>&) {
          std::vector<double> x(m);
          for (std::size_t i = 0; i < m; ++i)
            x[i] = std::exp(move(random) + 0.01 * static_cast<double>(i) * sigma);
          return x;
        });
        check(result);
      }
    }
  }
}

TEST_CASE("published bound: adversaries") {
  for (const std::size_t m : {2U, 3U, 8U}) {
    for (const double eta : {0.01, 0.05, 0.2, 1.0}) {
      for (const double low : {0.9, 0.5, 0.2}) {
        CAPTURE(m);
        CAPTURE(eta);
        CAPTURE(low);
        const std::vector<Maker> makers = {
            // hits the line that is heaviest
            [&](const std::vector<double>& w) {
              std::vector<double> x(m, 1.0);
              x[static_cast<std::size_t>(std::max_element(w.begin(), w.end()) - w.begin())] = low;
              return x;
            },
            // favours the line that is lightest
            [&](const std::vector<double>& w) {
              std::vector<double> x(m, low);
              x[static_cast<std::size_t>(std::min_element(w.begin(), w.end()) - w.begin())] = 1.0;
              return x;
            },
            // one line always wins: the strategy is late by ln(m)/eta
            [&](const std::vector<double>&) {
              std::vector<double> x(m, low);
              x.back() = 1.0;
              return x;
            }};
        for (const Maker& maker : makers) {
          const Run result = run(m, eta, 300, maker);
          check(result);
        }
      }
    }
  }
}

// (2, 1), (1/2, 1) for ever: the stock ends where it began, the even mix grows by 9/8 every two days
// (Cover 1991's example; (9/8)^50 after 100 days).
TEST_CASE("published bound: the doubling and halving stock") {
  for (const double eta : {0.01, 0.05, 0.3}) {
    int day = 0;
    const Run result = run(2, eta, 100, [&](const std::vector<double>&) {
      return ++day % 2 != 0 ? std::vector<double>{2.0, 1.0} : std::vector<double>{0.5, 1.0};
    });
    check(result);
  }
  Days days;
  for (int pair = 0; pair < 50; ++pair) {
    days.push_back({2.0, 1.0});
    days.push_back({0.5, 1.0});
  }
  const Hindsight best = best_constant_mix(days);
  CHECK(best.log_wealth_at_most == doctest::Approx(50 * std::log(9.0 / 8.0)).epsilon(1e-9));
}

// The first term is real: against one line that always wins by little, the regret comes near to it.
TEST_CASE("published bound: the bound is not empty") {
  const Run result = run(2, 0.02, 3000, [](const std::vector<double>&) {
    return std::vector<double>{0.5, 1.0};
  });
  CHECK(result.regret > 0.25 * std::log(2.0) / 0.02);
  check(result);
}

}  // namespace
}  // namespace nightweigh::strategies

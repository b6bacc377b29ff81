// Invented gate problems for the tests of the gate.
#pragma once

#include <Eigen/Dense>
#include <algorithm>
#include <cmath>
#include <cstdint>
#include <random>

#include "strategies/gate/gate.h"

namespace nightweigh::gate::testing {

using Random = std::mt19937_64;

inline double uniform(Random& random, double low, double high) {
  return std::uniform_real_distribution<double>(low, high)(random);
}

// A point of the simplex; each entry is 0 with the given chance.
inline Eigen::VectorXd simplex(Random& random, Eigen::Index m, double chance_of_zero = 0.0) {
  Eigen::VectorXd out(m);
  for (Eigen::Index i = 0; i < m; ++i) {
    out[i] = uniform(random, 0.0, 1.0) < chance_of_zero ? 0.0 : -std::log(uniform(random, 1e-12, 1.0));
  }
  if (!(out.sum() > 0.0)) {
    out[static_cast<Eigen::Index>(random() % static_cast<std::uint64_t>(m))] = 1.0;
  }
  return out / out.sum();
}

// One common factor and own noise, 0.5 % to 3 % a day; the last line is cash where asked.
inline Eigen::MatrixXd covariation(Random& random, Eigen::Index m, bool cash) {
  Eigen::VectorXd loading(m);
  Eigen::VectorXd own(m);
  for (Eigen::Index i = 0; i < m; ++i) {
    loading[i] = uniform(random, 0.002, 0.015);
    own[i] = uniform(random, 0.003, 0.025);
  }
  if (cash) {
    loading[m - 1] = own[m - 1] = 0.0;
  }
  Eigen::MatrixXd s = loading * loading.transpose();
  s.diagonal() += own.cwiseAbs2();
  const double mean = s.trace() / static_cast<double>(m);
  s.diagonal().array() += 1e-3 * mean;
  return s;
}

// Held weights: the wanted ones after a drift of the given size (0.05: a few days; 1: far away).
inline Problem problem(Random& random, Eigen::Index m, double drift, double chance_of_zero = 0.1) {
  Problem out;
  const bool cash = m > 1 && random() % 2 == 0;
  out.covariation = covariation(random, m, cash);
  out.wanted = simplex(random, m, chance_of_zero);
  const Eigen::VectorXd other = simplex(random, m, chance_of_zero);
  out.held = (1.0 - drift) * out.wanted + drift * other;
  out.held /= out.held.sum();
  for (Eigen::Index i = 0; i < m; ++i) {
    const double side = uniform(random, 2e-4, 5e-3);
    out.costs.buy.push_back(side * uniform(random, 0.5, 1.5));
    out.costs.sell.push_back(side * uniform(random, 0.5, 1.5));
  }
  if (cash) {
    out.costs.buy.back() = out.costs.sell.back() = 0.0;
  }
  out.response = random() % 3 == 0 ? 0.0 : uniform(random, 0.0, 0.6);
  return out;
}

inline Eigen::VectorXd mean_costs(const Problem& problem) {
  Eigen::VectorXd out(problem.held.size());
  for (Eigen::Index i = 0; i < out.size(); ++i) {
    const auto line = static_cast<std::size_t>(i);
    out[i] = 0.5 * (problem.costs.buy[line] + problem.costs.sell[line]);
  }
  return out;
}

inline Penalty penalty_of(const Problem& problem) {
  return penalty(problem.covariation, problem.wanted, mean_costs(problem), problem.response);
}

// The objective of the move, term by term in long double.
inline long double objective(const Eigen::MatrixXd& m, const Problem& problem, const Eigen::VectorXd& w) {
  long double out = 0;
  for (Eigen::Index i = 0; i < w.size(); ++i) {
    for (Eigen::Index j = 0; j < w.size(); ++j) {
      out += 0.5L * (static_cast<long double>(w[i]) - problem.wanted[i]) * m(i, j) *
             (static_cast<long double>(w[j]) - problem.wanted[j]);
    }
    const long double bought = static_cast<long double>(w[i]) - problem.held[i];
    const auto line = static_cast<std::size_t>(i);
    out += bought > 0 ? problem.costs.buy[line] * bought : problem.costs.sell[line] * -bought;
  }
  return out;
}

// How far w is from the Karush-Kuhn-Tucker conditions, from their definition: the least violation over all
// multipliers of "each line's slopes enclose the multiplier", in long double.
inline double kkt_violation(const Eigen::MatrixXd& m, const Problem& problem, const Eigen::VectorXd& w) {
  long double highest_down = -1e30L;
  long double lowest_up = 1e30L;
  for (Eigen::Index i = 0; i < w.size(); ++i) {
    long double gradient = 0;
    for (Eigen::Index j = 0; j < w.size(); ++j) {
      gradient += m(i, j) * (static_cast<long double>(w[j]) - problem.wanted[j]);
    }
    const auto line = static_cast<std::size_t>(i);
    const long double up =
        gradient + (w[i] >= problem.held[i] ? problem.costs.buy[line] : -problem.costs.sell[line]);
    const long double down =
        gradient + (w[i] > problem.held[i] ? problem.costs.buy[line] : -problem.costs.sell[line]);
    lowest_up = std::min(lowest_up, up);
    if (w[i] > 0) {
      highest_down = std::max(highest_down, down);
    }
  }
  return static_cast<double>(std::max(highest_down - lowest_up, 0.0L));
}

inline double cost_max(const Problem& problem) {
  double out = 0;
  for (std::size_t i = 0; i < problem.costs.buy.size(); ++i) {
    out = std::max({out, problem.costs.buy[i], problem.costs.sell[i]});
  }
  return out;
}

}  // namespace nightweigh::gate::testing

#include <doctest/doctest.h>

#include <Eigen/Dense>
#include <algorithm>
#include <cmath>
#include <optional>
#include <stdexcept>
#include <vector>

#include "strategies/gate/gate.h"
#include "tests/unit/strategies/gate/problems.h"

namespace {

using namespace nightweigh;
using namespace nightweigh::gate::testing;

// Holdings after one line's close alone has moved by a factor, from the definition of a weight.
Eigen::VectorXd drifted(const Eigen::VectorXd& held, Eigen::Index line, double factor) {
  Eigen::VectorXd values = held;
  values[line] *= factor;
  return values / values.sum();
}

// Steepest sale less steepest purchase for these holdings: above 0 outside the no-trade region.
double excess(const gate::Problem& problem, const gate::Penalty& penalty, const Eigen::VectorXd& held) {
  const Eigen::VectorXd gradient = penalty.matrix * (held - problem.wanted);
  double sell = -1e300;
  double buy = 1e300;
  for (Eigen::Index i = 0; i < held.size(); ++i) {
    const auto line = static_cast<std::size_t>(i);
    buy = std::min(buy, gradient[i] + problem.costs.buy[line]);
    if (held[i] > 0.0) {
      sell = std::max(sell, gradient[i] - problem.costs.sell[line]);
    }
  }
  return sell - buy;
}

}  // namespace

TEST_CASE("stock and cash: the edges are the published band") {
  // Davis and Norman (1990): half-width (1.5 c b^2 (1-b)^2)^(1/3); 0.0454280148 at c = 0.001, b = 0.5.
  gate::Problem problem;
  problem.covariation = Eigen::MatrixXd::Zero(2, 2);
  problem.covariation(0, 0) = 1e-4;
  problem.wanted = Eigen::Vector2d(0.5, 0.5);
  problem.held = Eigen::Vector2d(0.52, 0.48);
  problem.costs = {{0.001, 0.0}, {0.001, 0.0}};
  const gate::Decision decision = gate::decide(problem);
  REQUIRE(decision.worth.reason == gate::Worth::Reason::nothing_to_trade);
  const gate::Edges edges = gate::edges(problem, decision.penalty, 0);
  REQUIRE(edges.weight_below.has_value());
  REQUIRE(edges.weight_above.has_value());
  CHECK(*edges.weight_below == doctest::Approx(0.5 - 0.0454280148).epsilon(1e-9));
  CHECK(*edges.weight_above == doctest::Approx(0.5 + 0.0454280148).epsilon(1e-9));
  CHECK(edges.way_to_edge == doctest::Approx(0.02 / 0.0454280148).epsilon(1e-8));
  // 0.52 f / (1 + 0.52 (f-1)) = weight.
  CHECK(drifted(problem.held, 0, *edges.factor_above)[0] ==
        doctest::Approx(*edges.weight_above).epsilon(1e-14));
  CHECK(drifted(problem.held, 0, *edges.factor_below)[0] ==
        doctest::Approx(*edges.weight_below).epsilon(1e-14));
}

TEST_CASE("just inside each edge nothing trades, just outside something does") {
  Random random(53);
  int checked = 0;
  int unreached = 0;
  for (int run = 0; run < 200; ++run) {
    const Eigen::Index m = 2 + static_cast<Eigen::Index>(random() % 12);
    gate::Problem problem = gate::testing::problem(random, m, 0.5, 0.2);
    const gate::Penalty penalty = penalty_of(problem);
    // Somewhere inside: most of the way from the wanted weights to where the gate would stop.
    const gate::Move move = gate::best_move(penalty.matrix, problem.held, problem.wanted, problem.costs);
    const double part = uniform(random, 0.0, 0.9);
    problem.held = (1 - part) * problem.wanted + part * move.weights;
    const std::vector<gate::Edges> all = gate::all_edges(problem, penalty);
    REQUIRE(static_cast<Eigen::Index>(all.size()) == m);
    for (Eigen::Index i = 0; i < m; ++i) {
      const gate::Edges edges = gate::edges(problem, penalty, static_cast<std::size_t>(i));
      const gate::Edges& same = all[static_cast<std::size_t>(i)];
      CHECK(edges.factor_below == same.factor_below);
      CHECK(edges.factor_above == same.factor_above);
      CHECK(edges.way_to_edge == same.way_to_edge);
      CHECK(edges.way_to_edge < 1.0);
      for (const bool above : {false, true}) {
        const std::optional<double> factor = above ? edges.factor_above : edges.factor_below;
        if (problem.held[i] <= 0.0 || problem.held[i] >= 1.0) {
          CHECK_FALSE(factor.has_value());
        } else if (factor) {
          const double outwards = above ? 1e-7 : -1e-7;
          CHECK(excess(problem, penalty, drifted(problem.held, i, *factor * (1 - outwards))) <= 0.0);
          CHECK(excess(problem, penalty, drifted(problem.held, i, *factor * (1 + outwards))) > 0.0);
          ++checked;
        } else {
          CHECK(excess(problem, penalty, drifted(problem.held, i, above ? 4.0 : 0.25)) <= 1e-16);
          ++unreached;
        }
      }
    }
  }
  MESSAGE("edges checked: ", checked, ", beyond a factor of 4: ", unreached);
  CHECK(checked > 500);
  CHECK(unreached > 100);
}

TEST_CASE("outside the region there are no edges, and the way is all gone") {
  Random random(59);
  const gate::Problem problem = gate::testing::problem(random, 4, 0.9);
  const gate::Penalty penalty = penalty_of(problem);
  const gate::Edges edges = gate::edges(problem, penalty, 1);
  CHECK_FALSE(edges.factor_below.has_value());
  CHECK_FALSE(edges.factor_above.has_value());
  CHECK(edges.way_to_edge == 1.0);
}

TEST_CASE("a trigger is a close at which the verdict is move, and just before it is stay") {
  Random random(61);
  int checked = 0;
  for (int run = 0; run < 60; ++run) {
    const Eigen::Index m = 2 + static_cast<Eigen::Index>(random() % 6);
    gate::Problem problem = gate::testing::problem(random, m, 0.02);
    const gate::Decision decision = gate::decide(problem);
    if (decision.worth.pays) {
      continue;
    }
    const auto verdict = [&](Eigen::Index line, double factor) {
      gate::Problem moved = problem;
      moved.held = drifted(problem.held, line, factor);
      return gate::decide(moved).worth.pays;
    };
    for (Eigen::Index i = 0; i < m; ++i) {
      const auto line = static_cast<std::size_t>(i);
      const gate::Triggers triggers = gate::triggers(problem, decision.penalty, line);
      const gate::Edges edges = gate::edges(problem, decision.penalty, line);
      if (triggers.factor_above) {
        CHECK(verdict(i, *triggers.factor_above * (1 + 1e-8)));
        CHECK_FALSE(verdict(i, *triggers.factor_above * (1 - 1e-8)));
        ++checked;
        if (edges.factor_above) {
          CHECK(*triggers.factor_above > *edges.factor_above);
        }
      }
      if (triggers.factor_below) {
        CHECK(verdict(i, *triggers.factor_below * (1 - 1e-8)));
        CHECK_FALSE(verdict(i, *triggers.factor_below * (1 + 1e-8)));
        ++checked;
      }
    }
  }
  CHECK(checked > 50);
}

TEST_CASE("a line that does not exist is a bug of the caller") {
  Random random(67);
  const gate::Problem problem = gate::testing::problem(random, 4, 0.01);
  const gate::Penalty penalty = penalty_of(problem);
  CHECK_THROWS_AS(gate::edges(problem, penalty, 4), std::logic_error);
  CHECK_THROWS_AS(gate::triggers(problem, penalty, 4), std::logic_error);
}

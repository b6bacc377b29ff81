#include <doctest/doctest.h>

#include <Eigen/Dense>
#include <algorithm>
#include <cmath>
#include <limits>
#include <stdexcept>
#include <vector>

#include "strategies/gate/gate.h"
#include "tests/unit/strategies/gate/problems.h"

namespace {

using namespace nightweigh;
using namespace nightweigh::gate::testing;
using gate::testing::objective;

// The optimum by trying everything: each line stands at its held weight, at 0, above or below its held
// weight; for each of the 4^m patterns the free lines solve a linear system; the best feasible answer is the
// optimum, since the true one has some pattern.
struct Exact {
  Eigen::VectorXd weights;
  long double objective = std::numeric_limits<long double>::infinity();
};

Exact by_enumeration(const Eigen::MatrixXd& penalty, const gate::Problem& problem) {
  enum Place { at_held, at_zero, above, below };
  const Eigen::Index m = problem.held.size();
  Exact best;
  const long patterns = 1L << (2 * m);
  for (long pattern = 0; pattern < patterns; ++pattern) {
    Eigen::VectorXd w(m);
    std::vector<Eigen::Index> free;
    for (Eigen::Index i = 0; i < m; ++i) {
      const auto place = static_cast<Place>((pattern >> (2 * i)) & 3);
      w[i] = place == at_held ? problem.held[i] : 0.0;
      if (place == above || place == below) {
        free.push_back(i);
      }
    }
    const auto k = static_cast<Eigen::Index>(free.size());
    if (k == 0) {
      if (std::abs(w.sum() - 1.0) > 1e-12) {
        continue;
      }
    } else {
      // [M_FF 1; 1' 0] [w_F; -multiplier] = [M_F b - M_F. w_fixed - cost side; 1 - sum fixed]
      Eigen::MatrixXd system = Eigen::MatrixXd::Zero(k + 1, k + 1);
      Eigen::VectorXd right(k + 1);
      for (Eigen::Index p = 0; p < k; ++p) {
        const Eigen::Index i = free[static_cast<std::size_t>(p)];
        const auto line = static_cast<std::size_t>(i);
        const bool buys = static_cast<Place>((pattern >> (2 * i)) & 3) == above;
        double value = buys ? -problem.costs.buy[line] : problem.costs.sell[line];
        for (Eigen::Index j = 0; j < m; ++j) {
          value += penalty(i, j) * (problem.wanted[j] - w[j]);
        }
        for (Eigen::Index q = 0; q < k; ++q) {
          system(p, q) = penalty(i, free[static_cast<std::size_t>(q)]);
        }
        system(p, k) = system(k, p) = 1.0;
        right[p] = value;
      }
      right[k] = 1.0 - w.sum();
      const Eigen::VectorXd solution = system.fullPivLu().solve(right);
      bool feasible = (system * solution - right).norm() < 1e-9 * (1.0 + right.norm());
      for (Eigen::Index p = 0; p < k && feasible; ++p) {
        w[free[static_cast<std::size_t>(p)]] = std::max(solution[p], 0.0);
        feasible = solution[p] > -1e-12;
      }
      if (!feasible) {
        continue;
      }
    }
    // The sides need no check: the true objective of any point on the simplex is an upper bound.
    const long double value = objective(penalty, problem, w);
    if (value < best.objective) {
      best = {w, value};
    }
  }
  return best;
}

}  // namespace

TEST_CASE("no pattern of lines does better: exhaustive search over small books") {
  Random random(5);
  double worst_objective = 0;
  double worst_weight = 0;
  int moved = 0;
  for (int run = 0; run < 400; ++run) {
    const Eigen::Index m = 1 + static_cast<Eigen::Index>(random() % 5);
    const gate::Problem problem = gate::testing::problem(random, m, uniform(random, 0.02, 1.0), 0.25);
    const gate::Penalty penalty = penalty_of(problem);
    const gate::Move move = gate::best_move(penalty.matrix, problem.held, problem.wanted, problem.costs);
    const Exact exact = by_enumeration(penalty.matrix, problem);
    const long double value = objective(penalty.matrix, problem, move.weights);
    worst_objective = std::max(worst_objective, static_cast<double>(value - exact.objective));
    worst_weight = std::max(worst_weight, (move.weights - exact.weights).cwiseAbs().maxCoeff());
    CHECK(std::abs(static_cast<double>(value) - move.objective) < 1e-15);
    moved += move.weights != problem.held ? 1 : 0;
  }
  MESSAGE("worst excess of the objective: ", worst_objective, ", of a weight: ", worst_weight, "; moved ",
          moved);
  CHECK(worst_objective < 1e-15);
  CHECK(worst_weight < 1e-9);
  CHECK(moved > 200);
}

TEST_CASE("the optimality conditions hold on random books up to 200 lines, and the certificate says so") {
  Random random(17);
  double worst = 0;
  double worst_certificate = 0;
  int most_steps = 0;
  for (int run = 0; run < 300; ++run) {
    const Eigen::Index m = 2 + static_cast<Eigen::Index>(random() % (run % 10 == 0 ? 199 : 40));
    const gate::Problem problem =
        gate::testing::problem(random, m, uniform(random, 0.02, 1.0), uniform(random, 0.0, 0.6));
    const gate::Penalty penalty = penalty_of(problem);
    const gate::Move move = gate::best_move(penalty.matrix, problem.held, problem.wanted, problem.costs);
    const double scale = cost_max(problem);
    worst = std::max(worst, kkt_violation(penalty.matrix, problem, move.weights) / scale);
    worst_certificate = std::max(worst_certificate, move.certificate / scale);
    most_steps = std::max(most_steps, move.steps);
    CHECK(move.weights.minCoeff() >= 0.0);
    CHECK(std::abs(move.weights.sum() - 1.0) < 1e-14);
  }
  MESSAGE("of the largest cost: violation ", worst, ", certificate ", worst_certificate, "; most steps ",
          most_steps);
  CHECK(worst < 1e-11);
  CHECK(worst_certificate < 1e-11);
}

TEST_CASE("the objective is within the certificate of the optimum, for any point") {
  // A large book without its certificate near 0 cannot be had from outside, so the statement is tested where
  // the certificate is that of b itself.
  Random random(23);
  for (int run = 0; run < 50; ++run) {
    gate::Problem problem = gate::testing::problem(random, 8, 0.4);
    const gate::Decision best = gate::decide(problem);
    problem.settings.always = true;
    const gate::Decision all = gate::decide(problem);
    CHECK(all.move.weights == problem.wanted);
    CHECK(all.move.objective >= best.move.objective);
    CHECK(all.move.objective - all.move.certificate <= best.move.objective);
  }
}

TEST_CASE("lines that do not trade keep their weight to the bit") {
  Random random(29);
  int kept = 0;
  for (int run = 0; run < 100; ++run) {
    const gate::Problem problem = gate::testing::problem(random, 20, 0.1);
    const gate::Penalty penalty = penalty_of(problem);
    const gate::Move move = gate::best_move(penalty.matrix, problem.held, problem.wanted, problem.costs);
    for (Eigen::Index i = 0; i < 20; ++i) {
      const double way = std::abs(move.weights[i] - problem.held[i]);
      CHECK((way == 0.0 || way > 1e-12));
      kept += way == 0.0 ? 1 : 0;
    }
  }
  CHECK(kept > 200);
}

TEST_CASE("a singular penalty is no trouble") {
  // Two lines that the penalty cannot tell apart: only the costs choose between them.
  Eigen::MatrixXd penalty(3, 3);
  penalty << 0.02, 0.02, 0.0, 0.02, 0.02, 0.0, 0.0, 0.0, 0.0;
  const Eigen::VectorXd held = Eigen::Vector3d(0.5, 0.5, 0.0);
  const Eigen::VectorXd wanted = Eigen::Vector3d(0.2, 0.2, 0.6);
  const costs::Proportional costs{{0.001, 0.0005, 0.0}, {0.001, 0.0005, 0.0}};
  const gate::Move move = gate::best_move(penalty, held, wanted, costs);
  // The cheaper of the two goes first, and wholly: at a sum y the slope is 0.02 (y - 0.4), above its cost of
  // 0.0005 down to y = 0.5; the dearer one goes on until the slope is 0.001, at y = 0.45.
  CHECK(move.weights[1] == 0.0);
  CHECK(move.weights[0] == doctest::Approx(0.45).epsilon(1e-14));
  CHECK(move.certificate < 1e-14);
  // No penalty at all: nothing is worth a cost.
  CHECK(gate::best_move(Eigen::MatrixXd::Zero(3, 3), held, wanted, costs).weights == held);
}

TEST_CASE("a line at 0 is not sold, however much the slopes would like it") {
  Eigen::MatrixXd penalty = Eigen::MatrixXd::Identity(3, 3);
  const Eigen::VectorXd held = Eigen::Vector3d(0.0, 0.7, 0.3);
  const Eigen::VectorXd wanted = Eigen::Vector3d(0.0, 0.2, 0.8);
  const costs::Proportional costs{{0.01, 0.01, 0.01}, {0.01, 0.01, 0.01}};
  const gate::Move move = gate::best_move(penalty, held, wanted, costs);
  CHECK(move.weights[0] == 0.0);
  CHECK(move.weights[1] == doctest::Approx(0.21).epsilon(1e-14));
}

TEST_CASE("sizes that differ are a bug of the caller") {
  const Eigen::VectorXd two = Eigen::Vector2d(0.5, 0.5);
  CHECK_THROWS_AS(gate::best_move(Eigen::MatrixXd::Identity(3, 3), two, two, {{0.0, 0.0}, {0.0, 0.0}}),
                  std::logic_error);
  CHECK_THROWS_AS(gate::best_move(Eigen::MatrixXd::Identity(2, 2), two, two, {{0.0}, {0.0, 0.0}}),
                  std::logic_error);
}

#include <algorithm>
#include <vector>

#include "strategies/gate/dense.h"
#include "strategies/gate/descent.h"
#include "strategies/gate/gate.h"

namespace nightweigh::gate {
namespace {

// Rounds of descent and linear solve. Each blocked solve settles a line and each descent frees only lines
// that gain by it, so the rounds come to an end by themselves; the limit is there so that no input can hang
// a night. The certificate tells the truth whatever ended the search.
int rounds_limit(Eigen::Index m) {
  return 100 + 4 * static_cast<int>(m);
}

// Steps of pair descent in one round before a linear solve is worth its cost.
int steps_limit(Eigen::Index m) {
  return 100 + static_cast<int>(m);
}

bool all_zero(const std::vector<double>& values) {
  return std::all_of(values.begin(), values.end(), [](double value) { return value == 0.0; });
}

void search(Descent& descent, Move& out) {
  const Eigen::Index m = descent.weights().size();
  Eigen::VectorXd best = descent.weights();
  double best_slope = descent.steepest().slope;
  double best_objective = descent.objective();
  const auto note = [&] {
    const double slope = descent.steepest().slope;
    if (slope < best_slope) {
      best_slope = slope;
      best = descent.weights();
      best_objective = descent.objective();
      return true;
    }
    return false;
  };
  int idle_rounds = 0;
  for (int round = 0; round < rounds_limit(m) && idle_rounds < 3; ++round) {
    for (int step = 0; step < steps_limit(m); ++step) {
      const Descent::Pair pair = descent.steepest();
      if (!(pair.slope > descent.tolerance()) || !descent.pair_step(pair)) {
        break;
      }
      ++out.steps;
    }
    bool better = note();
    const Descent::Face face = descent.face_step();
    better = note() || better || face == Descent::Face::blocked;
    if (face != Descent::Face::blocked && !(best_slope > descent.tolerance())) {
      break;
    }
    idle_rounds = better ? 0 : idle_rounds + 1;
  }
  out.weights = best;
  out.certificate = std::max(best_slope, 0.0);
  out.objective = best_objective;
}

}  // namespace

Move best_move(const Eigen::MatrixXd& penalty, const Eigen::VectorXd& held, const Eigen::VectorXd& wanted,
               const costs::Proportional& costs) {
  const Eigen::Index m = held.size();
  require_shapes(m >= 1 && penalty.rows() == m && penalty.cols() == m && wanted.size() == m &&
                     static_cast<Eigen::Index>(costs.buy.size()) == m &&
                     static_cast<Eigen::Index>(costs.sell.size()) == m,
                 "gate::best_move: penalty, weights and costs differ in size");
  fix_eigen_blocking();
  Move out;
  if (all_zero(costs.buy) && all_zero(costs.sell)) {
    // Nothing stands against it: the objective is 0 there, its least value.
    out.weights = is_rounding(held, wanted) ? held : wanted;
    return out;
  }
  Descent descent(penalty, held, wanted, costs, held);
  const double slope = descent.steepest().slope;
  out.weights = held;
  out.certificate = std::max(slope, 0.0);
  out.objective = descent.objective();
  if (!(slope > descent.tolerance())) {
    return out;  // inside the no-trade region: one O(m^2) look was enough
  }
  search(descent, out);
  if (is_rounding(held, out.weights)) {
    out.weights = held;
  }
  return out;
}

}  // namespace nightweigh::gate

#include <algorithm>

#include "strategies/gate/dense.h"
#include "strategies/gate/descent.h"
#include "strategies/gate/gate.h"

namespace nightweigh::gate {
namespace {

// No side of a trade costs the whole of it: the self-financing equation asks for less than 1.
constexpr double cost_max = 0.99;

void require_problem(const Problem& problem) {
  const Eigen::Index m = problem.held.size();
  require_shapes(m >= 1 && problem.covariation.rows() == m && problem.covariation.cols() == m &&
                     problem.wanted.size() == m && static_cast<Eigen::Index>(problem.costs.buy.size()) == m &&
                     static_cast<Eigen::Index>(problem.costs.sell.size()) == m,
                 "gate: covariation, weights and costs differ in size");
}

Penalty penalty_of(const Problem& problem) {
  Eigen::VectorXd mean_cost(problem.held.size());
  for (Eigen::Index i = 0; i < mean_cost.size(); ++i) {
    const auto line = static_cast<std::size_t>(i);
    mean_cost[i] = 0.5 * (problem.costs.buy[line] + problem.costs.sell[line]);
  }
  return penalty(problem.covariation, problem.wanted, mean_cost, problem.response);
}

Move all_the_way(const Problem& problem, const Penalty& penalty) {
  const bool rounding = is_rounding(problem.held, problem.wanted);
  const Eigen::VectorXd& to = rounding ? problem.held : problem.wanted;
  const Descent there(penalty.matrix, problem.held, problem.wanted, problem.costs, to);
  Move out;
  out.weights = to;
  out.certificate = std::max(there.steepest().slope, 0.0);
  out.objective = there.objective();
  return out;
}

// 1/2 (a-b)'Q(a-b) - 1/2 (w-b)'Q(w-b) = 1/2 (a-w)'Q((a-b) + (w-b)): like this a small move's saving is
// not the difference of two large numbers.
double saved(const Eigen::MatrixXd& q, const Eigen::VectorXd& moved, const Eigen::VectorXd& twice_middle) {
  const Eigen::VectorXd slopes = product(q, twice_middle);
  return 0.5 * dot(moved, slopes);
}

}  // namespace

Worth worth(const Problem& problem, const Penalty& penalty, const Eigen::VectorXd& to) {
  require_problem(problem);
  require_shapes(to.size() == problem.held.size() && penalty.matrix.rows() == to.size() &&
                     penalty.matrix.cols() == to.size(),
                 "gate::worth: penalty and weights differ in size");
  Worth out;
  if (to == problem.held) {
    return out;
  }
  const Eigen::VectorXd moved = problem.held - to;
  const Eigen::VectorXd twice_middle = (problem.held - problem.wanted) + (to - problem.wanted);
  out.cost =
      costs::log_cost_of_loss(costs::self_financing_loss(span_of(problem.held), span_of(to), problem.costs));
  out.growth_saved = saved(problem.covariation, moved, twice_middle);
  // Where lines move as one, nothing is saved and g is rounding of either sign.
  const double noise =
      1e-14 * problem.covariation.diagonal().maxCoeff() * length_one(moved) * length_one(twice_middle);
  if (!(out.growth_saved > noise)) {
    out.reason = Worth::Reason::no_saving;
    return out;
  }
  const double horizon = saved(penalty.matrix, moved, twice_middle) / out.growth_saved;
  const double payback = out.cost / out.growth_saved;
  out.horizon_days = horizon;
  out.payback_days = payback;
  if (!(payback <= horizon / (1.0 + problem.settings.extra_gain))) {
    out.reason = Worth::Reason::horizon_too_short;
  } else if (problem.settings.payback_days_max && !(payback <= *problem.settings.payback_days_max)) {
    out.reason = Worth::Reason::payback_too_long;
  } else {
    out.reason = Worth::Reason::pays;
    out.pays = true;
  }
  return out;
}

bool pays_with_costs_times(const Problem& problem, double factor) {
  Problem scaled = problem;
  for (double& cost : scaled.costs.buy) {
    cost = std::min(cost * factor, cost_max);
  }
  for (double& cost : scaled.costs.sell) {
    cost = std::min(cost * factor, cost_max);
  }
  return decide(scaled).worth.pays;
}

Decision decide(const Problem& problem) {
  require_problem(problem);
  Decision out;
  out.penalty = penalty_of(problem);
  out.move = problem.settings.always
                 ? all_the_way(problem, out.penalty)
                 : best_move(out.penalty.matrix, problem.held, problem.wanted, problem.costs);
  out.worth = worth(problem, out.penalty, out.move.weights);
  if (problem.settings.always && out.worth.reason != Worth::Reason::nothing_to_trade) {
    out.worth.pays = true;
    out.worth.reason = Worth::Reason::pays;
  }
  return out;
}

}  // namespace nightweigh::gate

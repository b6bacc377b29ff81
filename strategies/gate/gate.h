// The gate: which lines move tonight, how far, and does it pay? (See design: covariation, penalty, move,
// verdict.) Lines include cash. Proportional costs.
#pragma once

#include <Eigen/Dense>
#include <optional>
#include <string>
#include <vector>

#include "strategies/costs/self_financing.h"

namespace nightweigh::gate {

struct Settings {
  double extra_gain = 0.1;
  std::optional<double> payback_days_max = 1260.0;
  bool always = false;
};

// Everything that the decision depends on. All vectors have m entries.
struct Problem {
  Eigen::MatrixXd covariation;  // S, symmetric positive semidefinite
  Eigen::VectorXd held;         // a, on the simplex
  Eigen::VectorXd wanted;       // b, on the simplex
  costs::Proportional costs;    // cb, cs
  double response = 0.0;        // eta of the strategy, [0, 1]
  Settings settings;
};

// The penalty matrix M of the recipe, from S, b, the mean cost a side and the response. Symmetric positive
// semidefinite. `h` reports the scale.
struct Penalty {
  Eigen::MatrixXd matrix;
  double h = 0.0;
};
Penalty penalty(const Eigen::MatrixXd& covariation, const Eigen::VectorXd& wanted, const Eigen::VectorXd& mean_cost,
                double response);

// w+ = argmin over the simplex of 1/2 (w-b)'M(w-b) + sum cb_i (w_i-a_i)^+ + cs_i (a_i-w_i)^+.
struct Move {
  Eigen::VectorXd weights;  // entries equal to held[i] bit for bit where the line does not trade
  double certificate = 0;   // max down-slope - min up-slope, >= 0; the objective is within it of the optimum
  double objective = 0;
  int steps = 0;
};
Move best_move(const Eigen::MatrixXd& penalty, const Eigen::VectorXd& held, const Eigen::VectorXd& wanted,
               const costs::Proportional& costs);

// What a move from held to `to` is worth.
struct Worth {
  double cost = 0;           // -log nu, >= 0, once
  double growth_saved = 0;   // g, a day, in nats
  std::optional<double> horizon_days;  // H*; nullopt where g <= 0
  std::optional<double> payback_days;  // cost / g; nullopt where g <= 0
  bool pays = false;         // g > 0 and payback <= min(H*/(1 + extra_gain), payback_days_max)
  // Which test failed, where pays is false.
  enum class Reason { pays, nothing_to_trade, no_saving, horizon_too_short, payback_too_long } reason =
      Reason::nothing_to_trade;
};
Worth worth(const Problem& problem, const Penalty& penalty, const Eigen::VectorXd& to);

// The same question with every cost multiplied by `factor` (for "the verdict would be the same with costs
// halved"): the best move under those costs, and whether it pays.
bool pays_with_costs_times(const Problem& problem, double factor);

struct Decision {
  Penalty penalty;
  Move move;     // under `always`: all the way to b
  Worth worth;   // of that move; under `always` pays is true whenever anything would trade
};
// Pure; the same bits for the same inputs. O(m^2) when the night stays, plus the solver when it moves.
Decision decide(const Problem& problem);

// How far one line's own close would have to move, the other closes unchanged, for the gate to leave the
// no-trade region: factors below and above 1 (nullopt: no such move within a factor of 4), the weights of
// the line at these points, and how much of the way to the nearer edge it already stands, measured from
// the wanted weight (0 at the target, 1 at the edge). Only for a line of problem.held inside the region.
struct Edges {
  std::optional<double> factor_below, factor_above;
  std::optional<double> weight_below, weight_above;
  double way_to_edge = 0;
};
Edges edges(const Problem& problem, const Penalty& penalty, std::size_t line);

}  // namespace nightweigh::gate

// The gate: which lines move tonight, how far, and does it pay?
//
// The holdings have drifted to weights a, the strategy wants b, every trade costs. Small proportional costs
// give a no-trade band of half-width (3/2 c b^2 (1-b)^2)^(1/3) around the target, and only its nearest edge
// is worth trading to (Davis and Norman, Math. Oper. Res. 15, 1990; Shreve and Soner, Ann. Appl. Probab. 4,
// 1994; Rogers 2004; Janecek and Shreve, Finance Stoch. 8, 2004). Here the band is carried to many
// correlated lines by a quadratic penalty whose minimum, costs included, is the region's edge; with two lines
// it is exactly the published band. No estimated mean enters: what a move saves is the growth lost by not
// being at b, under the strategy's own premise that b is the log-optimal mix.
//
// All vectors have m >= 1 entries, one a line; cash is a line like any other. Weights are shares of the
// book's wealth, costs fractions of traded value a side, growth nats a trading day. Everything here is pure,
// and gives the same bits for the same inputs. Sizes that do not agree throw std::logic_error: that is a bug
// of the caller. Whether settings and costs make sense is checked where they are read.
#pragma once

#include <Eigen/Dense>
#include <cstddef>
#include <optional>
#include <vector>

#include "strategies/costs/self_financing.h"

namespace nightweigh::gate {

struct Settings {
  double extra_gain = 0.1;                          // the horizon must exceed the payback by this share; >= 0
  std::optional<double> payback_days_max = 1260.0;  // > 0; nullopt = no limit
  bool always = false;                              // go all the way to b every night, whatever it costs
};

// Everything that the decision depends on. All vectors have m entries.
struct Problem {
  Eigen::MatrixXd covariation;  // S, symmetric positive semidefinite, a day
  Eigen::VectorXd held;         // a, on the simplex
  Eigen::VectorXd wanted;       // b, on the simplex
  costs::Proportional costs;    // cb, cs: [0, 1) a side
  double response = 0.0;        // eta of the strategy, [0, 1]
  Settings settings;
};

// The penalty matrix M of the recipe, from S, b, the mean cost a side and the response. Symmetric positive
// semidefinite; it does not depend on the level of S, and grows with the 2/3 power of the level of costs.
struct Penalty {
  Eigen::MatrixXd matrix;
  double h = 0.0;  // the common scale, from "cost = 2 x tracking"; 0 with one line
};
// In here b is clipped to [1e-3, 1 - 1e-3] and brought back to sum 1, and costs are at least 1e-12. Where
// S is 0 it stands for the identity. Finite for every finite input. O(m^2).
Penalty penalty(const Eigen::MatrixXd& covariation, const Eigen::VectorXd& wanted,
                const Eigen::VectorXd& mean_cost, double response);

// w+ = argmin over the simplex of 1/2 (w-b)'M(w-b) + sum cb_i (w_i-a_i)^+ + cs_i (a_i-w_i)^+.
struct Move {
  Eigen::VectorXd weights;  // entries equal to held[i] bit for bit where the line does not trade
  double certificate = 0;   // max down-slope - min up-slope, >= 0; the objective is within it of the optimum
  double objective = 0;     // at `weights`
  int steps = 0;            // of pair descent
};
// Most-violating-pair descent from a, then one linear solve on the lines that trade. A line at 0 cannot be
// sold. A way of less than 1e-11 of the book is no move. Where every cost is 0: b itself.
// O(m^2) where nothing moves; else also O(m) a step and O(k^3) for k lines that trade.
Move best_move(const Eigen::MatrixXd& penalty, const Eigen::VectorXd& held, const Eigen::VectorXd& wanted,
               const costs::Proportional& costs);

// What a move from held to `to` is worth.
struct Worth {
  double cost = 0;                     // -log nu in nats, >= 0, paid once; nu by the self-financing equation
  double growth_saved = 0;             // g = 1/2 (a-b)'S(a-b) - 1/2 (w-b)'S(w-b), nats a day
  std::optional<double> horizon_days;  // H* = the same difference under M, over g; nullopt where g <= 0
  std::optional<double> payback_days;  // cost / g; nullopt where g <= 0
  bool pays = false;                   // g > 0 and payback <= min(H*/(1 + extra_gain), payback_days_max)
  // Which test failed, where pays is false.
  enum class Reason {
    pays,
    nothing_to_trade,
    no_saving,
    horizon_too_short,
    payback_too_long
  } reason = Reason::nothing_to_trade;
};
// A g within rounding of 0 (lines that move as one) counts as no saving. O(m^2).
Worth worth(const Problem& problem, const Penalty& penalty, const Eigen::VectorXd& to);

// The same question with every cost multiplied by `factor` >= 0 (for "the verdict would be the same with
// costs halved"): whether the best move under those costs pays. Costs stay below 0.99.
bool pays_with_costs_times(const Problem& problem, double factor);

struct Decision {
  Penalty penalty;
  Move move;    // under `always`: all the way to b, with the certificate that b has
  Worth worth;  // of that move; under `always` pays is true whenever anything would trade
};
// Pure; the same bits for the same inputs. O(m^2) when the night stays, plus the solver when it moves.
Decision decide(const Problem& problem);

// How far one line's own close would have to move, the other closes unchanged, for the holdings to leave the
// no-trade region. With a factor f on the close, a_i becomes a_i f / (1 + a_i (f-1)) and every other weight
// shrinks by the same denominator; b and S are those of tonight. On that path every slope is linear in a_i,
// so the edges are exact.
struct Edges {
  std::optional<double> factor_below, factor_above;  // nullopt: no edge within a factor of 4
  std::optional<double> weight_below, weight_above;  // of the line, at these points
  // How much of the way to the nearer edge the line already stands, in [0, 1], measured from the wanted
  // weight (0 there, 1 at the edge); where the other lines' drift puts the wanted weight outside the band,
  // from the band's middle.
  double way_to_edge = 0;
};
// For a holding inside the region. Outside it: no edges, and way_to_edge = 1. A line held at 0 or 1 has no
// edges, and way_to_edge = 0. O(m^2).
Edges edges(const Problem& problem, const Penalty& penalty, std::size_t line);
// The same for every line, in the order of the lines. O(m^2) for all together.
std::vector<Edges> all_edges(const Problem& problem, const Penalty& penalty);

// How far the line's own close would have to move for the verdict itself to become `move`: beyond the edge,
// since the move must also earn extra_gain and pay back in time. The factors nearest to 1 on either side
// (to 1e-9) at which it pays; nullopt where no factor up to 4 does. At these factors the verdict is `move`.
// For a night that stays. About a hundred O(m^2) looks and short moves.
struct Triggers {
  std::optional<double> factor_below, factor_above;
};
Triggers triggers(const Problem& problem, const Penalty& penalty, std::size_t line);

}  // namespace nightweigh::gate

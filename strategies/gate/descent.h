// The state of one search for the best move, and its two kinds of step; for this folder only.
#pragma once

#include <Eigen/Dense>
#include <vector>

#include "strategies/costs/self_financing.h"

namespace nightweigh::gate {

// minimise over the simplex  1/2 (w-b)'M(w-b) + sum cb_i (w_i-a_i)^+ + cs_i (a_i-w_i)^+,  from some w.
//
// Invariants, between calls:
//   D1  w_i >= 0, and sum w = sum a up to rounding;
//   D2  w_i is a_i bit for bit, or 0 exactly, wherever a step ended on that kink;
//   D3  the objective never rises beyond rounding.
class Descent {
 public:
  // Keeps references to the first four; `start` is on the simplex. O(m^2).
  Descent(const Eigen::MatrixXd& penalty, const Eigen::VectorXd& held, const Eigen::VectorXd& wanted,
          const costs::Proportional& costs, const Eigen::VectorXd& start);

  // The steepest sale against the steepest purchase.
  struct Pair {
    Eigen::Index sell = 0;
    Eigen::Index buy = 0;
    double slope = 0;  // what a unit moved from sell to buy gains; <= 0 at the optimum
  };
  // O(m).
  Pair steepest() const;

  // Moves along the pair to the exact minimum of the piecewise quadratic. False where rounding leaves
  // nothing to move. O(m).
  bool pair_step(const Pair& pair);

  // One linear solve on the lines that trade strictly (w_i > 0, w_i != a_i), then as far towards its
  // solution as no line passes a kink. O(k^3 + m k) for k such lines.
  enum class Face { nothing, reached, blocked };
  Face face_step();

  // Slopes that differ by less than this are equal up to rounding.
  double tolerance() const { return tolerance_; }
  const Eigen::VectorXd& weights() const { return w_; }
  double objective() const;

 private:
  double buy_slope(Eigen::Index i) const;   // right derivative along line i
  double sell_slope(Eigen::Index i) const;  // left derivative along line i
  void refresh_gradient();

  const Eigen::MatrixXd& m_;
  const Eigen::VectorXd& a_;
  const Eigen::VectorXd& b_;
  const costs::Proportional& costs_;
  Eigen::VectorXd w_;
  Eigen::VectorXd gradient_;  // M (w - b)
  double tolerance_ = 0;
};

}  // namespace nightweigh::gate

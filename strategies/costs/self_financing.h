// The exact self-financing factor: what is left of a book's wealth after a move, as a fraction.
//
// With weights a before the move and w wanted after it, wealth 1 before and nu after,
//   nu = 1 - fees - sum_i [ buy_i (nu w_i - a_i)^+ + sell_i (a_i - nu w_i)^+ ]
// (Gyorfi and Vajda, "Growth optimal investment with transaction costs", ALT 2008; Iyengar and Cover,
// "Growth optimal investment in horse race markets with costs", IEEE Trans. Inform. Theory 46, 2000).
// Left side minus right side is piecewise linear and strictly increasing in nu where every sell_i < 1
// (its slope is at least 1 - max_i sell_i), so the root is unique. It bends only at nu = a_i / w_i: the root
// is found among the sorted bends and then solved from its own straight piece; nothing is iterated.
#pragma once

#include <span>
#include <vector>

namespace nightweigh::costs {

// Proportional cost a side of each line as a fraction of traded value; 0 for cash.
struct Proportional {
  std::vector<double> buy;   // [0, 1)
  std::vector<double> sell;  // [0, 1)
};

// nu, at most 1. a and w: m values each on the simplex; costs: m values a side; fees >= 0: fixed fees as a
// fraction of wealth. Exactly 1 where a and w are the same and there are no fees. Returns a value <= 0 only
// where the fees exceed what selling everything would leave. O(m log m).
// Throws std::logic_error where the sizes differ.
double self_financing_factor(std::span<const double> a, std::span<const double> w, const Proportional& costs,
                             double fees = 0.0);

// 1 - nu of the same equation, without the cancellation: its relative error stays near 1e-15 however small
// the move is. Same arguments, errors and complexity.
double self_financing_loss(std::span<const double> a, std::span<const double> w, const Proportional& costs,
                           double fees = 0.0);

// -log(1 - loss) in nats, loss <= 1: the log-wealth that a loss costs. Relative error below 2e-14, and
// near 1e-16 for losses up to 2^-8; +infinity at 1.
double log_cost_of_loss(double loss);

}  // namespace nightweigh::costs

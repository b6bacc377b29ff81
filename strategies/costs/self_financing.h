// The exact self-financing factor: what is left of a book's wealth after a move, as a fraction.
//
// With weights a before the move and w wanted after it, wealth 1 before and nu after,
//   nu = 1 - fees - sum_i [ buy_i (nu w_i - a_i)^+ + sell_i (a_i - nu w_i)^+ ]
// (Gyorfi and Vajda 2008; Iyengar and Cover 2000). The left side minus the right side is strictly
// increasing in nu for sell_i < 1, so the root is unique; it is found exactly by walking the kinks.
#pragma once

#include <span>
#include <vector>

namespace nightweigh::costs {

// Proportional cost a side of each line as a fraction of traded value; 0 for cash.
struct Proportional {
  std::vector<double> buy;   // [0, 1)
  std::vector<double> sell;  // [0, 1)
};

// nu in (0, 1]. a and w: m values on the simplex. fees >= 0: fixed fees as a fraction of wealth.
// Returns a value <= 0 only if the fees exceed the wealth. O(m log m).
double self_financing_factor(std::span<const double> a, std::span<const double> w, const Proportional& costs,
                             double fees = 0.0);

}  // namespace nightweigh::costs

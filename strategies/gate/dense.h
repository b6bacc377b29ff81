// Small dense algebra whose bits depend on the numbers alone; for this folder only.
//
// Eigen is used on storage of its own (never on a map of foreign memory), compiled for the baseline, with
// fixed cache sizes. Products of a matrix and a vector are built up column by column, one accumulator a
// row, so that no order of summation is left to a library; dot products are those of strategies/numerics.
#pragma once

#include <Eigen/Dense>
#include <span>

#include "strategies/costs/self_financing.h"

namespace nightweigh::gate {

// Fixes Eigen's idea of the caches (it asks the machine otherwise, and blocks its products by the answer).
// Cheap after the first call; every entry point that uses Eigen's blocked algorithms calls it.
void fix_eigen_blocking();

// Throws std::logic_error(message) unless the shapes that a caller promised hold.
void require_shapes(bool hold, const char* message);

inline std::span<const double> span_of(const Eigen::VectorXd& v) {
  return {v.data(), static_cast<std::size_t>(v.size())};
}

// a * x. O(m^2); columns whose factor is 0 cost nothing.
Eigen::VectorXd product(const Eigen::MatrixXd& a, const Eigen::VectorXd& x);

double dot(const Eigen::VectorXd& a, const Eigen::VectorXd& b);
double sum(const Eigen::VectorXd& a);
// sum |a_i|
double length_one(const Eigen::VectorXd& a);

// Variance of a pair: a_ii + a_jj - 2 a_ij, and 0 where rounding leaves less.
inline double pair_variance(const Eigen::MatrixXd& a, Eigen::Index i, Eigen::Index j) {
  const double v = (a(i, i) + a(j, j)) - 2.0 * a(i, j);
  return v > 0.0 ? v : 0.0;
}

// sum buy_i (w_i - a_i)^+ + sell_i (a_i - w_i)^+
double linear_cost(const Eigen::VectorXd& held, const Eigen::VectorXd& to, const costs::Proportional& costs);

// Whether the way from held to `to` is less than 1e-11 of the book: rounding, not a trade.
bool is_rounding(const Eigen::VectorXd& held, const Eigen::VectorXd& to);

}  // namespace nightweigh::gate

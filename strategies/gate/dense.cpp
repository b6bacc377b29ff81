#include "strategies/gate/dense.h"

#include <cstddef>
#include <stdexcept>

#include "strategies/numerics/numerics.h"

namespace nightweigh::gate {

void fix_eigen_blocking() {
  static const bool fixed = [] {
    constexpr std::ptrdiff_t kibibyte = 1024;
    Eigen::setCpuCacheSizes(32 * kibibyte, 256 * kibibyte, 2048 * kibibyte);
    return true;
  }();
  static_cast<void>(fixed);
}

void require_shapes(bool hold, const char* message) {
  if (!hold) {
    throw std::logic_error(message);
  }
}

Eigen::VectorXd product(const Eigen::MatrixXd& a, const Eigen::VectorXd& x) {
  Eigen::VectorXd out = Eigen::VectorXd::Zero(a.rows());
  double* const sums = out.data();
  const Eigen::Index rows = a.rows();
  for (Eigen::Index j = 0; j < a.cols(); ++j) {
    const double factor = x[j];
    if (factor == 0.0) {
      continue;
    }
    const double* const column = a.data() + j * rows;
    for (Eigen::Index i = 0; i < rows; ++i) {
      sums[i] += column[i] * factor;
    }
  }
  return out;
}

double dot(const Eigen::VectorXd& a, const Eigen::VectorXd& b) {
  return numerics::dot(span_of(a), span_of(b));
}

double sum(const Eigen::VectorXd& a) {
  return numerics::sum(span_of(a));
}

double length_one(const Eigen::VectorXd& a) {
  const Eigen::VectorXd sizes = a.cwiseAbs();
  return sum(sizes);
}

double linear_cost(const Eigen::VectorXd& held, const Eigen::VectorXd& to, const costs::Proportional& costs) {
  Eigen::VectorXd terms(held.size());
  for (Eigen::Index i = 0; i < held.size(); ++i) {
    const double bought = to[i] - held[i];
    const auto line = static_cast<std::size_t>(i);
    terms[i] = bought > 0.0 ? costs.buy[line] * bought : costs.sell[line] * -bought;
  }
  return sum(terms);
}

bool is_rounding(const Eigen::VectorXd& held, const Eigen::VectorXd& to) {
  constexpr double turnover_min = 1e-11;
  const Eigen::VectorXd way = to - held;
  return length_one(way) < turnover_min;
}

}  // namespace nightweigh::gate

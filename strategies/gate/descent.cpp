#include "strategies/gate/descent.h"

#include <algorithm>
#include <cmath>
#include <limits>

#include "strategies/gate/dense.h"
#include "strategies/numerics/numerics.h"

namespace nightweigh::gate {
namespace {

// Solves H x = r for a symmetric H >= 0. Positive definite almost always; where it is only semidefinite
// (lines that move as one), the pivoted form answers with the directions of no curvature left at 0.
Eigen::VectorXd solve_semidefinite(const Eigen::MatrixXd& h, const Eigen::VectorXd& r) {
  const Eigen::LLT<Eigen::MatrixXd> cholesky(h);
  if (cholesky.info() == Eigen::Success) {
    Eigen::VectorXd x = cholesky.solve(r);
    if (x.allFinite()) {
      return x;
    }
  }
  const Eigen::LDLT<Eigen::MatrixXd> pivoted(h);
  return pivoted.solve(r);
}

}  // namespace

Descent::Descent(const Eigen::MatrixXd& penalty, const Eigen::VectorXd& held, const Eigen::VectorXd& wanted,
                 const costs::Proportional& costs, const Eigen::VectorXd& start)
    : m_(penalty), a_(held), b_(wanted), costs_(costs), w_(start) {
  refresh_gradient();
  // The gradient's rounding error is a few units in the last place of sum_j |M_ij| |a_j - b_j|; M is positive
  // semidefinite, so |M_ij| <= max M_kk. Costs at rest add theirs.
  const Eigen::VectorXd apart = a_ - b_;
  double cost_max = 0.0;
  for (std::size_t i = 0; i < costs_.buy.size(); ++i) {
    cost_max = std::max({cost_max, costs_.buy[i], costs_.sell[i]});
  }
  const double gradient_scale = m_.diagonal().maxCoeff() * length_one(apart);
  tolerance_ = 4.0 * std::numeric_limits<double>::epsilon() * gradient_scale + 1e-13 * cost_max;
}

void Descent::refresh_gradient() {
  const Eigen::VectorXd apart = w_ - b_;
  gradient_ = product(m_, apart);
}

double Descent::buy_slope(Eigen::Index i) const {
  const auto line = static_cast<std::size_t>(i);
  return gradient_[i] + (w_[i] >= a_[i] ? costs_.buy[line] : -costs_.sell[line]);
}

double Descent::sell_slope(Eigen::Index i) const {
  const auto line = static_cast<std::size_t>(i);
  return gradient_[i] + (w_[i] > a_[i] ? costs_.buy[line] : -costs_.sell[line]);
}

Descent::Pair Descent::steepest() const {
  Pair pair;
  double sell_best = -std::numeric_limits<double>::infinity();
  double buy_best = std::numeric_limits<double>::infinity();
  for (Eigen::Index i = 0; i < w_.size(); ++i) {
    if (w_[i] > 0.0) {  // a line at 0 cannot be sold
      const double slope = sell_slope(i);
      if (slope > sell_best) {
        sell_best = slope;
        pair.sell = i;
      }
    }
    const double slope = buy_slope(i);
    if (slope < buy_best) {
      buy_best = slope;
      pair.buy = i;
    }
  }
  pair.slope = sell_best - buy_best;
  return pair;
}

bool Descent::pair_step(const Pair& pair) {
  const Eigen::Index i = pair.sell;
  const Eigen::Index j = pair.buy;
  if (i == j || !(pair.slope > 0.0)) {
    return false;
  }
  const auto sell = static_cast<std::size_t>(i);
  const auto buy = static_cast<std::size_t>(j);
  const double curvature = pair_variance(m_, i, j);
  // Along t: the slope is -pair.slope at 0, grows with the curvature, and jumps where a line passes the
  // weight at which it is held. The walk ends where the slope changes its sign, or with line i at 0.
  const double never = std::numeric_limits<double>::infinity();
  const double buy_kink = a_[j] > w_[j] ? a_[j] - w_[j] : never;
  const double sell_kink = w_[i] > a_[i] ? w_[i] - a_[i] : never;
  const double end = w_[i];
  double t = 0.0;
  double slope = -pair.slope;
  while (true) {
    double next = end;
    if (buy_kink > t) {
      next = std::min(next, buy_kink);
    }
    if (sell_kink > t) {
      next = std::min(next, sell_kink);
    }
    const double slope_there = slope + curvature * (next - t);
    if (slope_there >= 0.0) {
      t = std::min(next, t - slope / curvature);
      break;
    }
    t = next;
    if (t >= end) {
      break;
    }
    slope = slope_there;
    if (t == buy_kink) {
      slope += costs_.buy[buy] + costs_.sell[buy];
    }
    if (t == sell_kink) {
      slope += costs_.buy[sell] + costs_.sell[sell];
    }
    if (slope >= 0.0) {
      break;
    }
  }
  const double sold_to = t >= end ? 0.0 : (t == sell_kink ? a_[i] : std::max(0.0, w_[i] - t));
  const double bought_to = t == buy_kink ? a_[j] : w_[j] + t;
  const double sold = sold_to - w_[i];
  const double bought = bought_to - w_[j];
  if (sold == 0.0 && bought == 0.0) {
    return false;
  }
  w_[i] = sold_to;
  w_[j] = bought_to;
  const double* const column_i = m_.data() + i * m_.rows();
  const double* const column_j = m_.data() + j * m_.rows();
  double* const gradient = gradient_.data();
  for (Eigen::Index k = 0; k < gradient_.size(); ++k) {
    gradient[k] += column_j[k] * bought + column_i[k] * sold;
  }
  return true;
}

Descent::Face Descent::face_step() {
  std::vector<Eigen::Index> face;
  Eigen::Index reference = -1;  // the line that takes up what the others do: the one with most room
  for (Eigen::Index i = 0; i < w_.size(); ++i) {
    if (w_[i] > 0.0 && w_[i] != a_[i]) {
      face.push_back(i);
      if (reference < 0 || std::abs(w_[i] - a_[i]) > std::abs(w_[reference] - a_[reference])) {
        reference = i;
      }
    }
  }
  if (face.size() < 2) {
    return Face::nothing;
  }
  face.erase(std::find(face.begin(), face.end(), reference));

  // Newton on the face: with d_reference = -sum d_k the simplex constraint is gone. On the face the costs
  // are linear, so each slope there is that of a purchase where w_k > a_k and of a sale where w_k < a_k.
  const auto n = static_cast<Eigen::Index>(face.size());
  Eigen::MatrixXd h(n, n);
  Eigen::VectorXd slopes(n);
  const double reference_slope = buy_slope(reference);
  for (Eigen::Index q = 0; q < n; ++q) {
    const Eigen::Index j = face[static_cast<std::size_t>(q)];
    for (Eigen::Index p = q; p < n; ++p) {
      const Eigen::Index i = face[static_cast<std::size_t>(p)];
      h(p, q) = (m_(i, j) + m_(reference, reference)) - (m_(i, reference) + m_(j, reference));
      h(q, p) = h(p, q);
    }
    slopes[q] = reference_slope - buy_slope(j);
  }
  const Eigen::VectorXd step = solve_semidefinite(h, slopes);
  if (!step.allFinite()) {
    return Face::nothing;
  }

  Eigen::VectorXd direction = Eigen::VectorXd::Zero(w_.size());
  for (Eigen::Index q = 0; q < n; ++q) {
    direction[face[static_cast<std::size_t>(q)]] = step[q];
  }
  direction[reference] = -sum(step);
  face.push_back(reference);

  double length = 1.0;
  Eigen::Index blocking = -1;
  double blocked_at = 0.0;
  for (const Eigen::Index i : face) {
    const double d = direction[i];
    // Where line i meets a kink first: its held weight, or 0.
    const bool towards_held = w_[i] > a_[i] ? d < 0.0 : d > 0.0;
    if (d == 0.0 || (!towards_held && d > 0.0)) {
      continue;
    }
    const double kink = towards_held ? a_[i] : 0.0;
    const double reach = (kink - w_[i]) / d;
    if (reach < length) {
      length = reach;
      blocking = i;
      blocked_at = kink;
    }
  }
  // The reference takes up the sum exactly; where it is the blocking line itself, another one does.
  Eigen::Index taker = reference;
  if (blocking == reference) {
    taker = face.front();
  }
  for (const Eigen::Index i : face) {
    if (i != taker) {
      w_[i] = i == blocking ? blocked_at : std::max(0.0, w_[i] + length * direction[i]);
    }
  }
  w_[taker] = 0.0;
  const Eigen::VectorXd others = w_ - a_;
  // w_taker - a_taker = -sum of the others' moves; the taker's own entry of `others` is -a_taker.
  w_[taker] = std::max(0.0, -(sum(others)));
  refresh_gradient();
  return blocking >= 0 ? Face::blocked : Face::reached;
}

double Descent::objective() const {
  const Eigen::VectorXd apart = w_ - b_;
  return 0.5 * dot(apart, gradient_) + linear_cost(a_, w_, costs_);
}

}  // namespace nightweigh::gate

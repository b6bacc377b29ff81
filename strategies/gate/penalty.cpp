// The penalty matrix of the gate, from the covariation, the wanted mix, the costs and the response.
#include <algorithm>
#include <cmath>
#include <utility>
#include <vector>

#include "strategies/gate/dense.h"
#include "strategies/gate/gate.h"
#include "strategies/numerics/numerics.h"

namespace nightweigh::gate {
namespace {

constexpr double wanted_min = 1e-3;
constexpr double cost_min = 1e-12;
constexpr double one_minus_response_min = 0.05;
constexpr double mixing = 0.5;  // beta: how far V is drawn towards its own diagonal
constexpr double pair_floor = 0.02;
// A line whose value never leaves that of the mix has V_ii = 0 and would get an infinite scale. With the
// ridge of Covariation::estimate this floor never binds: there V_ii >= 1e-9 of the mean variance.
constexpr double relative_variance_min = 1e-12;

Eigen::VectorXd clipped(const Eigen::VectorXd& wanted) {
  const Eigen::VectorXd inner = wanted.cwiseMax(wanted_min).cwiseMin(1.0 - wanted_min);
  const double total = sum(inner);
  return inner / total;
}

// Covariation in units of its mean variance; the identity where nothing has moved. The penalty does not
// depend on the level, and like this no level can over- or underflow it.
Eigen::MatrixXd level_free(const Eigen::MatrixXd& covariation) {
  const Eigen::VectorXd diagonal = covariation.diagonal();
  const double mean = sum(diagonal) / static_cast<double>(diagonal.size());
  if (!(mean > 0.0)) {
    return Eigen::MatrixXd::Identity(covariation.rows(), covariation.cols());
  }
  return covariation / mean;
}

// V = S - S b 1' - 1 b'S + (b'S b) 1 1'
Eigen::MatrixXd relative_to_target(const Eigen::MatrixXd& s, const Eigen::VectorXd& b) {
  const Eigen::VectorXd sb = product(s, b);
  const double bsb = dot(b, sb);
  const Eigen::Index m = s.rows();
  Eigen::MatrixXd v(m, m);
  for (Eigen::Index j = 0; j < m; ++j) {
    for (Eigen::Index i = j; i < m; ++i) {
      v(i, j) = (s(i, j) - (sb[i] + sb[j])) + bsb;
      v(j, i) = v(i, j);
    }
    v(j, j) = std::max(v(j, j), relative_variance_min);
  }
  return v;
}

// D: the scale that gives each line alone its published band.
Eigen::VectorXd line_scales(const Eigen::MatrixXd& v, const Eigen::VectorXd& b, const Eigen::VectorXd& c) {
  const double mixed_cost = dot(b, c);
  Eigen::VectorXd scales(b.size());
  for (Eigen::Index i = 0; i < b.size(); ++i) {
    const double rest = 1.0 - b[i];
    const double round_cost = c[i] + std::max(mixed_cost - b[i] * c[i], 0.0) / rest;  // ce_i
    const double inner = b[i] * rest;
    const double band = numerics::cbrt(1.5 * round_cost * (inner * inner));  // delta_i
    scales[i] = std::sqrt(round_cost * rest / (band * v(i, i)));
  }
  return scales;
}

// T1 = (1/6) sum_{i<j} p_ij v_ij ((c_i + c_j) / mu_ij)^2, mu floored at 2 % of its p-weighted mean.
double tracking_at_the_band(const Eigen::MatrixXd& s, const Eigen::MatrixXd& m0, const Eigen::VectorXd& b,
                            const Eigen::VectorXd& c) {
  const Eigen::Index m = b.size();
  const Eigen::VectorXd per_rest = (1.0 - b.array()).inverse();
  const auto pair_weight = [&](Eigen::Index i, Eigen::Index j) {  // p_ij
    return 0.5 * (b[j] * per_rest[i] + b[i] * per_rest[j]);
  };
  Eigen::VectorXd weights(m);
  Eigen::VectorXd weighted(m);
  std::vector<double> terms;
  std::vector<double> shares;
  terms.reserve(static_cast<std::size_t>(m));
  shares.reserve(static_cast<std::size_t>(m));
  for (Eigen::Index j = 0; j < m; ++j) {
    terms.clear();
    shares.clear();
    for (Eigen::Index i = j + 1; i < m; ++i) {
      const double p = pair_weight(i, j);
      shares.push_back(p);
      terms.push_back(p * pair_variance(m0, i, j));
    }
    weights[j] = numerics::sum(shares);
    weighted[j] = numerics::sum(terms);
  }
  const double floor = pair_floor * sum(weighted) / sum(weights);
  for (Eigen::Index j = 0; j < m; ++j) {
    terms.clear();
    for (Eigen::Index i = j + 1; i < m; ++i) {
      const double ratio = (c[i] + c[j]) / std::max(pair_variance(m0, i, j), floor);
      terms.push_back(pair_weight(i, j) * pair_variance(s, i, j) * (ratio * ratio));
    }
    weighted[j] = numerics::sum(terms);
  }
  return sum(weighted) / 6.0;
}

// tr(M0 J S J), J = diag b - b b'. J S J is b_i b_j V_ij, so no product of matrices is needed.
double trading_at_the_band(const Eigen::MatrixXd& m0, const Eigen::MatrixXd& v, const Eigen::VectorXd& b) {
  const Eigen::Index m = b.size();
  Eigen::VectorXd columns(m);
  Eigen::VectorXd terms(m);
  for (Eigen::Index j = 0; j < m; ++j) {
    for (Eigen::Index i = 0; i < m; ++i) {
      terms[i] = m0(i, j) * (b[i] * b[j] * v(i, j));
    }
    columns[j] = sum(terms);
  }
  return sum(columns);
}

}  // namespace

Penalty penalty(const Eigen::MatrixXd& covariation, const Eigen::VectorXd& wanted,
                const Eigen::VectorXd& mean_cost, double response) {
  const Eigen::Index m = wanted.size();
  require_shapes(m >= 1 && covariation.rows() == m && covariation.cols() == m && mean_cost.size() == m,
                 "gate::penalty: covariation, wanted weights and costs differ in size");
  if (m == 1) {
    return {Eigen::MatrixXd::Zero(1, 1), 0.0};  // one line alone can go nowhere
  }
  const Eigen::VectorXd b = clipped(wanted);
  const Eigen::VectorXd c = mean_cost.cwiseMax(cost_min);
  const Eigen::MatrixXd s = level_free(covariation);
  const Eigen::MatrixXd v = relative_to_target(s, b);
  const Eigen::VectorXd scale = line_scales(v, b, c);

  Eigen::MatrixXd matrix(m, m);
  for (Eigen::Index j = 0; j < m; ++j) {
    for (Eigen::Index i = j + 1; i < m; ++i) {
      matrix(i, j) = scale[i] * ((1.0 - mixing) * v(i, j)) * scale[j];
      matrix(j, i) = matrix(i, j);
    }
    matrix(j, j) = scale[j] * v(j, j) * scale[j];
  }

  // Cost = 2 x tracking: the cost rate at the band's edge is h/2 tr(M0 J S J) by Ito's formula, the
  // tracking rate T1 / h^2.
  const double tracking = tracking_at_the_band(s, matrix, b, c);
  const double trading = trading_at_the_band(matrix, v, b);
  const double follow = std::clamp(1.0 - response, one_minus_response_min, 1.0);
  double h = numerics::cbrt(4.0 * tracking / trading) / numerics::cbrt(follow * follow);
  if (!(h > 0.0 && std::isfinite(h))) {
    h = 1.0;  // lines that never move against each other: nothing can be saved, and any scale will do
  }
  matrix *= h;
  return {std::move(matrix), h};
}

}  // namespace nightweigh::gate

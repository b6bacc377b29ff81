#include <doctest/doctest.h>

#include <Eigen/Dense>
#include <cmath>
#include <stdexcept>

#include "strategies/gate/gate.h"
#include "tests/unit/strategies/gate/problems.h"

namespace {

using namespace nightweigh;
using namespace nightweigh::gate::testing;

// The half-width of the published no-trade band: cost c a side of the mid, wanted weight b. Davis and Norman
// (Math. Oper. Res. 15, 1990); Shreve and Soner (1994); Rogers (2004); Janecek and Shreve (2004); Gerhold,
// Guasoni, Muhle-Karbe and Schachermayer (2014). The formula is from memory of these works.
double published_half_width(double c, double b) {
  return std::cbrt(1.5 * c * b * b * (1 - b) * (1 - b));
}

gate::Problem stock_and_cash(double c, double b, double held, double daily_sd = 0.01) {
  gate::Problem problem;
  problem.covariation = Eigen::MatrixXd::Zero(2, 2);
  problem.covariation(0, 0) = daily_sd * daily_sd;
  problem.held = Eigen::Vector2d(held, 1 - held);
  problem.wanted = Eigen::Vector2d(b, 1 - b);
  problem.costs = {{c, 0.0}, {c, 0.0}};
  return problem;
}

}  // namespace

TEST_CASE("with two lines the region is exactly the published band, from either side") {
  // Computed from the formula: theta 0.5 and 10 bp, theta 0.5 and 1 %, theta 0.6 and 5 bp.
  CHECK(published_half_width(0.001, 0.5) == doctest::Approx(0.0454280148).epsilon(1e-9));
  CHECK(published_half_width(0.01, 0.5) == doctest::Approx(0.0978716917).epsilon(1e-9));
  CHECK(published_half_width(0.0005, 0.6) == doctest::Approx(0.0350882129).epsilon(1e-9));
  for (const double c : {0.0001, 0.0005, 0.001, 0.01}) {
    for (const double b : {0.2, 0.5, 0.6, 0.85}) {
      for (const double sd : {1e-4, 0.01, 0.2}) {
        const double half_width = published_half_width(c, b);
        CAPTURE(c);
        CAPTURE(b);
        // The free cash line counts as 1e-12 in the recipe, which moves the edge by its third of 1e-12 / c.
        const double above = gate::decide(stock_and_cash(c, b, 1.0, sd)).move.weights[0];
        CHECK(above - b == doctest::Approx(half_width).epsilon(1e-8));
        const double below = gate::decide(stock_and_cash(c, b, 0.0, sd)).move.weights[0];
        CHECK(b - below == doctest::Approx(half_width).epsilon(1e-8));
      }
    }
  }
}

TEST_CASE("two lines that both cost: the band of the cost of a round") {
  gate::Problem problem = stock_and_cash(0.001, 0.4, 0.9);
  problem.costs = {{0.001, 0.0005}, {0.001, 0.0005}};
  problem.covariation << 1e-4, 3e-5, 3e-5, 4e-4;
  CHECK(gate::decide(problem).move.weights[0] - 0.4 ==
        doctest::Approx(published_half_width(0.0015, 0.4)).epsilon(1e-12));
}

TEST_CASE("a strategy that follows the drift gets a narrower region") {
  // h carries (1 - eta)^(-2/3): at eta = 0.5 the penalty is 2^(2/3) times as high, the band as much narrower.
  gate::Problem problem = stock_and_cash(0.001, 0.5, 1.0);
  const double plain = gate::decide(problem).penalty.h;
  problem.response = 0.5;
  CHECK(gate::decide(problem).penalty.h == doctest::Approx(plain * std::cbrt(4.0)).epsilon(1e-14));
  problem.response = 1.0;  // 1 - eta is held at 0.05
  CHECK(gate::decide(problem).penalty.h == doctest::Approx(plain / std::cbrt(0.0025)).epsilon(1e-14));
}

TEST_CASE("the penalty equals the recipe written out in whole matrices") {
  Random random(3);
  double worst = 0;
  for (int run = 0; run < 200; ++run) {
    const Eigen::Index m = 2 + static_cast<Eigen::Index>(random() % 20);
    const gate::Problem problem = gate::testing::problem(random, m, 0.3, 0.3);
    const gate::Penalty penalty = penalty_of(problem);

    using Matrix = Eigen::Matrix<long double, Eigen::Dynamic, Eigen::Dynamic>;
    using Vector = Eigen::Matrix<long double, Eigen::Dynamic, 1>;
    Vector b = problem.wanted.cast<long double>().cwiseMax(1e-3L).cwiseMin(1 - 1e-3L);
    b /= b.sum();
    const Vector c = mean_costs(problem).cast<long double>().cwiseMax(1e-12L);
    const Matrix s = problem.covariation.cast<long double>();
    const Matrix projection = Matrix::Identity(m, m) - Vector::Ones(m) * b.transpose();
    const Matrix v = projection * s * projection.transpose();
    Vector d(m);
    for (Eigen::Index i = 0; i < m; ++i) {
      long double rest_cost = 0;
      for (Eigen::Index j = 0; j < m; ++j) {
        rest_cost += j == i ? 0 : b[j] * c[j];
      }
      const long double ce = c[i] + rest_cost / (1 - b[i]);
      const long double delta = cbrtl(1.5L * ce * b[i] * b[i] * (1 - b[i]) * (1 - b[i]));
      d[i] = sqrtl(ce * (1 - b[i]) / (delta * v(i, i)));
    }
    const Matrix diagonal = v.diagonal().asDiagonal();
    const Matrix m0 = d.asDiagonal() * (0.5L * v + 0.5L * diagonal) * d.asDiagonal();
    long double p_sum = 0;
    long double p_mu = 0;
    for (Eigen::Index i = 0; i < m; ++i) {
      for (Eigen::Index j = i + 1; j < m; ++j) {
        const long double p = 0.5L * (b[j] / (1 - b[i]) + b[i] / (1 - b[j]));
        p_sum += p;
        p_mu += p * (m0(i, i) + m0(j, j) - 2 * m0(i, j));
      }
    }
    long double t1 = 0;
    for (Eigen::Index i = 0; i < m; ++i) {
      for (Eigen::Index j = i + 1; j < m; ++j) {
        const long double p = 0.5L * (b[j] / (1 - b[i]) + b[i] / (1 - b[j]));
        const long double mu = std::max(m0(i, i) + m0(j, j) - 2 * m0(i, j), 0.02L * p_mu / p_sum);
        const long double ratio = (c[i] + c[j]) / mu;
        t1 += p * (s(i, i) + s(j, j) - 2 * s(i, j)) * ratio * ratio / 6;
      }
    }
    const Matrix whole = b.asDiagonal();
    const Matrix j = whole - b * b.transpose();
    const Matrix jsj = j * s * j;
    const Matrix product = m0 * jsj;
    const long double h = cbrtl(4 * t1 / product.trace()) * powl(1 - problem.response, -2.0L / 3);
    const Matrix expected = h * m0;
    const Matrix difference = penalty.matrix.cast<long double>() - expected;
    worst = std::max(worst,
                     static_cast<double>(difference.cwiseAbs().maxCoeff() / expected.cwiseAbs().maxCoeff()));
    CHECK(static_cast<double>(fabsl(penalty.h - h) / h) < 1e-10);
    CHECK(penalty.matrix == penalty.matrix.transpose());
  }
  MESSAGE("largest relative difference from the recipe in long double: ", worst);
  CHECK(worst < 1e-10);
}

TEST_CASE("the penalty is positive semidefinite, free of the level of S, and of order 2/3 in the costs") {
  Random random(11);
  for (int run = 0; run < 50; ++run) {
    const Eigen::Index m = 2 + static_cast<Eigen::Index>(random() % 30);
    gate::Problem problem = gate::testing::problem(random, m, 0.3, 0.3);
    for (std::size_t i = 0; i < problem.costs.buy.size(); ++i) {
      problem.costs.buy[i] += 1e-5;  // away from the floor of 1e-12, which does not scale
    }
    const gate::Penalty plain = penalty_of(problem);
    const Eigen::SelfAdjointEigenSolver<Eigen::MatrixXd> solver(plain.matrix, Eigen::EigenvaluesOnly);
    CHECK(solver.eigenvalues()[0] > -1e-13 * solver.eigenvalues()[m - 1]);

    for (const double level : {1e-200, 1e-8, 1e6, 1e200}) {
      gate::Problem other = problem;
      other.covariation *= level;
      const Eigen::MatrixXd difference = penalty_of(other).matrix - plain.matrix;
      CHECK(difference.cwiseAbs().maxCoeff() < 1e-12 * plain.matrix.cwiseAbs().maxCoeff());
    }
    const Eigen::VectorXd eight_fold = 8.0 * mean_costs(problem);
    const gate::Penalty dear =
        gate::penalty(problem.covariation, problem.wanted, eight_fold, problem.response);
    const Eigen::MatrixXd difference = dear.matrix - 4.0 * plain.matrix;
    CHECK(difference.cwiseAbs().maxCoeff() < 1e-12 * dear.matrix.cwiseAbs().maxCoeff());
    CHECK(dear.h == doctest::Approx(plain.h).epsilon(1e-12));
  }
}

TEST_CASE("one line has nowhere to go") {
  const gate::Penalty one = gate::penalty(Eigen::MatrixXd::Identity(1, 1), Eigen::VectorXd::Ones(1),
                                          Eigen::VectorXd::Constant(1, 0.001), 0.0);
  CHECK(one.matrix(0, 0) == 0.0);
}

TEST_CASE("sizes that differ are a bug of the caller") {
  CHECK_THROWS_AS(
      gate::penalty(Eigen::MatrixXd::Identity(2, 2), Eigen::VectorXd::Ones(1), Eigen::VectorXd::Ones(1), 0.0),
      std::logic_error);
  CHECK_THROWS_AS(
      gate::penalty(Eigen::MatrixXd::Identity(2, 3), Eigen::VectorXd::Ones(2), Eigen::VectorXd::Ones(2), 0.0),
      std::logic_error);
}

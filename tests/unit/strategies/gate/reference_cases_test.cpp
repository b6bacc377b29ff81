// The exact reference cases of tests/data/gate_cases.json (their origin: tests/data/README.md).
#include <doctest/doctest.h>

#include <Eigen/Dense>
#include <cmath>
#include <fstream>
#include <nlohmann/json.hpp>
#include <string>
#include <vector>

#include "strategies/gate/gate.h"

namespace {

using namespace nightweigh;
using nlohmann::json;

json cases() {
  std::ifstream file(std::string(NIGHTWEIGH_TEST_DATA) + "/gate_cases.json");
  REQUIRE(file.good());
  return json::parse(file);
}

Eigen::VectorXd vector_of(const json& values) {
  Eigen::VectorXd out(static_cast<Eigen::Index>(values.size()));
  for (Eigen::Index i = 0; i < out.size(); ++i) {
    out[i] = values.at(static_cast<std::size_t>(i)).get<double>();
  }
  return out;
}

Eigen::MatrixXd matrix_of(const json& rows) {
  const auto m = static_cast<Eigen::Index>(rows.size());
  Eigen::MatrixXd out(m, m);
  for (Eigen::Index i = 0; i < m; ++i) {
    out.row(i) = vector_of(rows.at(static_cast<std::size_t>(i))).transpose();
  }
  return out;
}

gate::Problem problem_of(const json& one) {
  gate::Problem problem;
  problem.held = vector_of(one.at("w_minus"));
  problem.wanted = vector_of(one.at("b"));
  problem.costs.buy = one.at("c").get<std::vector<double>>();
  problem.costs.sell = problem.costs.buy;
  problem.covariation = one.contains("S") ? matrix_of(one.at("S")) : matrix_of(one.at("M"));
  return problem;
}

double distance(const Eigen::MatrixXd& a, const Eigen::MatrixXd& b) {
  return (a - b).cwiseAbs().maxCoeff();
}

}  // namespace

TEST_CASE("the cases without a ticket charge: best move, what it costs and gains") {
  int checked = 0;
  for (const json& one : cases()) {
    if (!one.at("ticket_charge").is_null()) {
      continue;
    }
    CAPTURE(one.at("name").get<std::string>());
    const gate::Problem problem = problem_of(one);
    const Eigen::MatrixXd penalty = matrix_of(one.at("M"));
    const gate::Move move = gate::best_move(penalty, problem.held, problem.wanted, problem.costs);
    CHECK(distance(move.weights, vector_of(one.at("w_plus"))) < 1e-9);
    std::vector<int> traded;
    for (Eigen::Index i = 0; i < move.weights.size(); ++i) {
      if (move.weights[i] != problem.held[i]) {
        traded.push_back(static_cast<int>(i));
      }
    }
    CHECK(traded == one.at("traded").get<std::vector<int>>());
    CHECK(std::abs(move.objective - one.at("objective").get<double>()) < 1e-15);
    CHECK(move.certificate < 1e-15);

    const Eigen::VectorXd apart = problem.held - problem.wanted;
    const double stay = 0.5 * apart.dot(penalty * apart);
    CHECK(std::abs(stay - one.at("objective_hold").get<double>()) < 1e-15);
    const std::vector<double> a(problem.held.begin(), problem.held.end());
    const std::vector<double> w(move.weights.begin(), move.weights.end());
    CHECK(std::abs(costs::self_financing_factor(a, w, problem.costs) - one.at("nu").get<double>()) < 1e-15);
    double cost_linear = 0;
    for (std::size_t i = 0; i < a.size(); ++i) {
      cost_linear += problem.costs.buy[i] * std::abs(w[i] - a[i]);
    }
    CHECK(std::abs(cost_linear - one.at("cost_linear").get<double>()) < 1e-15);
    // `gain` is what the penalty falls by; the costs are not taken off.
    CHECK(std::abs(stay - (move.objective - cost_linear) - one.at("gain").get<double>()) < 1e-15);
    ++checked;
  }
  CHECK(checked == 5);
}

TEST_CASE("the case with a covariation: the recipe's penalty, growth saved, horizon, cost and payback") {
  int checked = 0;
  for (const json& one : cases()) {
    if (!one.at("ticket_charge").is_null() || !one.contains("S")) {
      continue;
    }
    gate::Problem problem = problem_of(one);
    const gate::Decision decision = gate::decide(problem);
    // The floor of 1e-12 under the free cash line's cost shows in the tenth digit.
    CHECK(distance(decision.penalty.matrix, matrix_of(one.at("M"))) < 1e-9);
    CHECK(decision.penalty.h == doctest::Approx(one.at("h").get<double>()).epsilon(1e-9));
    CHECK(distance(decision.move.weights, vector_of(one.at("w_plus"))) < 1e-9);
    const gate::Worth& worth = decision.worth;
    REQUIRE(worth.horizon_days.has_value());
    REQUIRE(worth.payback_days.has_value());
    CHECK(worth.growth_saved == doctest::Approx(one.at("growth_saved_per_day").get<double>()).epsilon(1e-9));
    CHECK(*worth.horizon_days == doctest::Approx(one.at("horizon_days").get<double>()).epsilon(1e-9));
    CHECK(worth.cost == doctest::Approx(one.at("cost").get<double>()).epsilon(1e-9));
    CHECK(*worth.payback_days == doctest::Approx(one.at("payback_days").get<double>()).epsilon(1e-9));
    CHECK(worth.pays);
    CHECK(worth.reason == gate::Worth::Reason::pays);

    // 96 days of payback against a horizon of 296: a third of it would do, not less.
    problem.settings.extra_gain = 2.0;
    CHECK(gate::decide(problem).worth.pays);
    problem.settings.extra_gain = 2.2;
    CHECK(gate::decide(problem).worth.reason == gate::Worth::Reason::horizon_too_short);
    problem.settings.extra_gain = 0.1;
    problem.settings.payback_days_max = 96.0;
    CHECK(gate::decide(problem).worth.reason == gate::Worth::Reason::payback_too_long);
    ++checked;
  }
  CHECK(checked == 1);
}

// Answers gate problems for checks in other languages: a JSON array of problems on stdin, a JSON array of
// answers on stdout. See gate_against_scipy.py, which writes the one and reads the other.
#include <Eigen/Dense>
#include <exception>
#include <iostream>
#include <nlohmann/json.hpp>
#include <optional>
#include <vector>

#include "strategies/gate/gate.h"

namespace {

using namespace nightweigh;
using nlohmann::json;

Eigen::VectorXd vector_of(const json& values) {
  const auto plain = values.get<std::vector<double>>();
  Eigen::VectorXd out(static_cast<Eigen::Index>(plain.size()));
  for (Eigen::Index i = 0; i < out.size(); ++i) {
    out[i] = plain[static_cast<std::size_t>(i)];
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

std::vector<double> plain(const Eigen::VectorXd& values) {
  return {values.begin(), values.end()};
}

json plain(const Eigen::MatrixXd& matrix) {
  json rows = json::array();
  for (Eigen::Index i = 0; i < matrix.rows(); ++i) {
    const Eigen::VectorXd row = matrix.row(i).transpose();
    rows.push_back(plain(row));
  }
  return rows;
}

json number_or_null(const std::optional<double>& value) {
  return value ? json(*value) : json(nullptr);
}

json answer(const json& question) {
  gate::Problem problem;
  problem.covariation = matrix_of(question.at("covariation"));
  problem.held = vector_of(question.at("held"));
  problem.wanted = vector_of(question.at("wanted"));
  problem.costs.buy = question.at("buy").get<std::vector<double>>();
  problem.costs.sell = question.at("sell").get<std::vector<double>>();
  problem.response = question.at("response").get<double>();
  const gate::Decision decision = gate::decide(problem);
  return {{"penalty", plain(decision.penalty.matrix)},
          {"h", decision.penalty.h},
          {"weights", plain(decision.move.weights)},
          {"objective", decision.move.objective},
          {"certificate", decision.move.certificate},
          {"cost", decision.worth.cost},
          {"growth_saved", decision.worth.growth_saved},
          {"horizon_days", number_or_null(decision.worth.horizon_days)},
          {"payback_days", number_or_null(decision.worth.payback_days)},
          {"pays", decision.worth.pays}};
}

}  // namespace

int main() {
  try {
    json answers = json::array();
    for (const json& question : json::parse(std::cin)) {
      answers.push_back(answer(question));
    }
    std::cout << answers << '\n';
    return std::cout ? 0 : 1;
  } catch (const std::exception& wrong) {
    std::cerr << "gate_probe: " << wrong.what() << '\n';
    return 1;
  }
}

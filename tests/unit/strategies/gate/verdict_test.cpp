#include <doctest/doctest.h>

#include <Eigen/Dense>
#include <algorithm>
#include <cmath>
#include <stdexcept>
#include <vector>

#include "strategies/gate/gate.h"
#include "tests/unit/strategies/gate/problems.h"

namespace {

using namespace nightweigh;
using namespace nightweigh::gate::testing;
using Reason = gate::Worth::Reason;

// Everything that a decision says, finite; weights on the simplex.
void check_sane(const gate::Problem& problem, const gate::Decision& decision) {
  CHECK(decision.penalty.matrix.allFinite());
  CHECK(std::isfinite(decision.penalty.h));
  CHECK(decision.move.weights.allFinite());
  CHECK(decision.move.weights.minCoeff() >= 0.0);
  CHECK(std::abs(decision.move.weights.sum() - 1.0) < 1e-12);
  CHECK(std::isfinite(decision.move.objective));
  CHECK(decision.move.certificate >= 0.0);
  if (!problem.settings.always) {
    CHECK(decision.move.certificate <= 1e-9 * cost_max(problem));
  }
  CHECK(decision.worth.cost >= 0.0);
  CHECK(std::isfinite(decision.worth.cost));
  CHECK(std::isfinite(decision.worth.growth_saved));
  CHECK(decision.worth.pays == (decision.worth.reason == Reason::pays));
  if (decision.worth.horizon_days) {
    CHECK(std::isfinite(*decision.worth.horizon_days));
    CHECK(std::isfinite(*decision.worth.payback_days));
    CHECK(*decision.worth.payback_days >= 0.0);
  }
  for (const gate::Edges& edges : gate::all_edges(problem, decision.penalty)) {
    CHECK(edges.way_to_edge >= 0.0);
    CHECK(edges.way_to_edge <= 1.0);
    for (const auto& factor : {edges.factor_below, edges.factor_above}) {
      CHECK((!factor || (*factor >= 0.25 && *factor <= 4.0)));
    }
  }
}

gate::Problem plain(Eigen::Index m, double cost) {
  gate::Problem problem;
  problem.covariation = 1e-4 * Eigen::MatrixXd::Identity(m, m);
  problem.held = Eigen::VectorXd::Constant(m, 1.0 / static_cast<double>(m));
  problem.wanted = problem.held;
  problem.costs = {std::vector<double>(static_cast<std::size_t>(m), cost),
                   std::vector<double>(static_cast<std::size_t>(m), cost)};
  return problem;
}

}  // namespace

TEST_CASE("the verdict is what its definition says") {
  Random random(31);
  int counts[5] = {};
  for (int run = 0; run < 500; ++run) {
    gate::Problem problem = gate::testing::problem(random, 2 + static_cast<Eigen::Index>(random() % 8),
                                                   uniform(random, 0.01, 0.4));
    problem.settings.extra_gain = uniform(random, 0.0, 0.5);
    problem.settings.payback_days_max = uniform(random, 20, 500);
    const gate::Decision decision = gate::decide(problem);
    check_sane(problem, decision);
    const gate::Worth& worth = decision.worth;
    ++counts[static_cast<int>(worth.reason)];
    if (worth.reason == Reason::nothing_to_trade) {
      CHECK(decision.move.weights == problem.held);
      continue;
    }
    const Eigen::VectorXd before = problem.held - problem.wanted;
    const Eigen::VectorXd after = decision.move.weights - problem.wanted;
    const double growth =
        0.5 * before.dot(problem.covariation * before) - 0.5 * after.dot(problem.covariation * after);
    const double relief =
        0.5 * before.dot(decision.penalty.matrix * before) - 0.5 * after.dot(decision.penalty.matrix * after);
    CHECK(std::abs(worth.growth_saved - growth) < 1e-15);
    const std::vector<double> a(problem.held.begin(), problem.held.end());
    const std::vector<double> w(decision.move.weights.begin(), decision.move.weights.end());
    const double cost = -std::log(costs::self_financing_factor(a, w, problem.costs));
    CHECK(std::abs(worth.cost - cost) < 1e-15);
    if (worth.reason == Reason::no_saving) {
      continue;
    }
    CHECK(*worth.horizon_days == doctest::Approx(relief / growth).epsilon(1e-6));
    CHECK(*worth.payback_days == doctest::Approx(cost / growth).epsilon(1e-6));
    const bool in_time = *worth.payback_days <= *problem.settings.payback_days_max;
    const bool within = *worth.payback_days <= *worth.horizon_days / (1 + problem.settings.extra_gain);
    CHECK(worth.pays == (in_time && within));
    CHECK(worth.reason ==
          (!within ? Reason::horizon_too_short : (!in_time ? Reason::payback_too_long : Reason::pays)));
  }
  CHECK(counts[static_cast<int>(Reason::pays)] > 20);
  CHECK(counts[static_cast<int>(Reason::nothing_to_trade)] > 20);
  CHECK(counts[static_cast<int>(Reason::horizon_too_short)] > 20);
  CHECK(counts[static_cast<int>(Reason::payback_too_long)] > 20);
}

TEST_CASE("without extra gain or limit, what leaves the band pays") {
  Random random(37);
  for (int run = 0; run < 300; ++run) {
    gate::Problem problem = gate::testing::problem(random, 2 + static_cast<Eigen::Index>(random() % 10), 0.5);
    problem.settings.extra_gain = 0.0;
    problem.settings.payback_days_max.reset();
    const gate::Decision decision = gate::decide(problem);
    if (decision.worth.reason != Reason::nothing_to_trade && decision.worth.growth_saved > 0.0) {
      CHECK(decision.worth.pays);
    }
  }
}

TEST_CASE("always: all the way, every night that something differs") {
  gate::Problem problem = plain(3, 0.01);
  problem.held = Eigen::Vector3d(0.34, 0.33, 0.33);
  CHECK(gate::decide(problem).worth.reason == Reason::nothing_to_trade);
  problem.settings.always = true;
  const gate::Decision decision = gate::decide(problem);
  check_sane(problem, decision);
  CHECK(decision.move.weights == problem.wanted);
  CHECK(decision.worth.pays);
  CHECK(decision.worth.cost > 0.0);
  CHECK(*decision.worth.payback_days > *decision.worth.horizon_days);  // and it says what it wastes
  problem.held = problem.wanted;
  CHECK(gate::decide(problem).worth.reason == Reason::nothing_to_trade);
}

TEST_CASE("all costs zero: straight to the wanted weights") {
  Random random(41);
  for (int run = 0; run < 50; ++run) {
    gate::Problem problem =
        gate::testing::problem(random, 2 + static_cast<Eigen::Index>(random() % 10), 0.05);
    std::fill(problem.costs.buy.begin(), problem.costs.buy.end(), 0.0);
    std::fill(problem.costs.sell.begin(), problem.costs.sell.end(), 0.0);
    const gate::Decision decision = gate::decide(problem);
    check_sane(problem, decision);
    CHECK(decision.move.weights == problem.wanted);
    CHECK(decision.worth.cost == 0.0);
    CHECK(*decision.worth.payback_days == 0.0);
    CHECK(decision.worth.pays);
    problem.held = problem.wanted;
    CHECK(gate::decide(problem).worth.reason == Reason::nothing_to_trade);
  }
}

TEST_CASE("dearer trading never turns stay into move") {
  Random random(43);
  int changes = 0;
  for (int run = 0; run < 200; ++run) {
    gate::Problem problem = gate::testing::problem(random, 5, 0.3);
    const double factors[] = {0.0, 0.5, 1.0, 2.0, 8.0};
    bool before = gate::pays_with_costs_times(problem, 0.0);
    for (const double factor : factors) {
      const bool pays = gate::pays_with_costs_times(problem, factor);
      changes += pays != before ? 1 : 0;
      before = pays;
      gate::Problem scaled = problem;
      for (std::size_t i = 0; i < 5; ++i) {
        scaled.costs.buy[i] *= factor;
        scaled.costs.sell[i] *= factor;
      }
      CHECK(pays == gate::decide(scaled).worth.pays);
    }
    CHECK(gate::pays_with_costs_times(problem, 0.0));
  }
  CHECK(changes > 50);
  // Whatever the factor, no side costs its whole value.
  CHECK_FALSE(gate::pays_with_costs_times(gate::testing::problem(random, 5, 0.3), 1e9));
}

TEST_CASE("degenerate books give finite, sensible answers") {
  SUBCASE("one line") {
    const gate::Problem problem = plain(1, 0.001);
    const gate::Decision decision = gate::decide(problem);
    check_sane(problem, decision);
    CHECK(decision.worth.reason == Reason::nothing_to_trade);
  }
  SUBCASE("held is wanted") {
    for (const Eigen::Index m : {2, 3, 50}) {
      const gate::Problem problem = plain(m, 0.001);
      const gate::Decision decision = gate::decide(problem);
      check_sane(problem, decision);
      CHECK(decision.worth.reason == Reason::nothing_to_trade);
      CHECK(decision.move.steps == 0);
    }
  }
  SUBCASE("a free cash line between lines that cost") {
    gate::Problem problem = plain(3, 0.001);
    problem.costs.buy[2] = problem.costs.sell[2] = 0.0;
    problem.covariation(2, 2) = 0.0;
    problem.held = Eigen::Vector3d(0.1, 0.1, 0.8);
    const gate::Decision decision = gate::decide(problem);
    check_sane(problem, decision);
    CHECK(decision.worth.pays);
    CHECK(decision.move.weights[0] > 0.25);
    CHECK(decision.move.weights[0] == doctest::Approx(decision.move.weights[1]).epsilon(1e-12));
  }
  SUBCASE("two identical lines, with and without a ridge") {
    for (const double ridge : {0.0, 1e-9, 1e-7}) {
      gate::Problem problem = plain(3, 0.001);
      problem.covariation << 1e-4, 1e-4, 2e-5, 1e-4, 1e-4, 2e-5, 2e-5, 2e-5, 2e-4;
      problem.covariation.diagonal().array() += ridge;
      problem.held = Eigen::Vector3d(0.6, 0.1, 0.3);
      problem.wanted = Eigen::Vector3d(0.2, 0.2, 0.6);
      const gate::Decision decision = gate::decide(problem);
      check_sane(problem, decision);
      CHECK(decision.move.weights[2] > 0.5);  // the third line is bought
      CHECK(decision.worth.pays);
      problem.held = Eigen::Vector3d(0.25, 0.15, 0.6);  // to shift between the twins saves next to nothing
      check_sane(problem, gate::decide(problem));
      CHECK_FALSE(gate::decide(problem).worth.pays);
    }
  }
  SUBCASE("nothing but identical lines: there is nothing to save") {
    gate::Problem problem = plain(4, 0.001);
    problem.covariation.setConstant(1e-4);
    problem.held = Eigen::Vector4d(0.7, 0.1, 0.1, 0.1);
    problem.settings.payback_days_max.reset();
    const gate::Decision decision = gate::decide(problem);
    check_sane(problem, decision);
    CHECK_FALSE(decision.worth.pays);
  }
  SUBCASE("no variance at all") {
    gate::Problem problem = plain(3, 0.001);
    problem.covariation.setZero();
    problem.held = Eigen::Vector3d(0.9, 0.05, 0.05);
    const gate::Decision decision = gate::decide(problem);
    check_sane(problem, decision);
    CHECK(decision.worth.reason == Reason::no_saving);
  }
  SUBCASE("one line of no variance among others") {
    gate::Problem problem = plain(3, 0.001);
    problem.covariation(1, 1) = 0.0;
    problem.held = Eigen::Vector3d(0.8, 0.1, 0.1);
    const gate::Decision decision = gate::decide(problem);
    check_sane(problem, decision);
    CHECK(decision.worth.pays);
  }
  SUBCASE("the wanted mix in a corner") {
    for (const bool held_in_other_corner : {false, true}) {
      gate::Problem problem = plain(4, 0.001);
      problem.wanted = Eigen::Vector4d(1, 0, 0, 0);
      problem.held =
          held_in_other_corner ? Eigen::Vector4d(0, 1, 0, 0) : Eigen::Vector4d(0.25, 0.25, 0.25, 0.25);
      const gate::Decision decision = gate::decide(problem);
      check_sane(problem, decision);
      CHECK(decision.worth.pays);
      CHECK(decision.move.weights[0] > 0.9);
    }
  }
  SUBCASE("195 zeros among 200 wanted weights") {
    Random random(47);
    gate::Problem problem = gate::testing::problem(random, 200, 0.3);
    problem.wanted.setZero();
    problem.wanted.head(5).setConstant(0.2);
    const gate::Decision decision = gate::decide(problem);
    check_sane(problem, decision);
    CHECK(decision.worth.pays);
    CHECK(decision.move.weights.head(5).sum() > 0.5);
  }
  SUBCASE("two lines, one of them empty") {
    gate::Problem problem = plain(2, 0.001);
    problem.held = Eigen::Vector2d(1, 0);
    const gate::Decision decision = gate::decide(problem);
    check_sane(problem, decision);
    CHECK(decision.worth.pays);
  }
}

TEST_CASE("sizes that differ are a bug of the caller") {
  gate::Problem problem = plain(3, 0.001);
  problem.costs.buy.pop_back();
  CHECK_THROWS_AS(gate::decide(problem), std::logic_error);
  problem = plain(3, 0.001);
  problem.wanted = Eigen::Vector2d(0.5, 0.5);
  CHECK_THROWS_AS(gate::decide(problem), std::logic_error);
}

#include <doctest/doctest.h>
#include <rapidcheck.h>

#include <Eigen/Dense>
#include <algorithm>
#include <cmath>
#include <cstdlib>
#include <cstring>
#include <memory>
#include <numeric>
#include <optional>
#include <vector>

#include "strategies/gate/gate.h"
#include "tests/unit/strategies/gate/problems.h"

namespace {

using namespace nightweigh;
using namespace nightweigh::gate::testing;
using Reason = gate::Worth::Reason;

// The same runs every time; RC_PARAMS in the environment asks for others.
const int seeded = setenv("RC_PARAMS", "seed=20240611 max_success=300", 0);

gate::Problem any_problem(Eigen::Index lines_max, double drift_max) {
  Random random(*rc::gen::arbitrary<std::uint64_t>());
  const auto m = static_cast<Eigen::Index>(*rc::gen::inRange(2, static_cast<int>(lines_max) + 1));
  const double drift = drift_max * *rc::gen::inRange(1, 1001) / 1000.0;
  return gate::testing::problem(random, m, drift, 0.2);
}

bool same_bits(const Eigen::MatrixXd& a, const Eigen::MatrixXd& b) {
  return a.rows() == b.rows() && a.cols() == b.cols() &&
         std::memcmp(a.data(), b.data(), static_cast<std::size_t>(a.size()) * sizeof(double)) == 0;
}

bool same_bits(double a, double b) {
  return std::memcmp(&a, &b, sizeof a) == 0;
}

bool same_bits(const std::optional<double>& a, const std::optional<double>& b) {
  return a.has_value() == b.has_value() && (!a || same_bits(*a, *b));
}

bool same_bits(const gate::Decision& a, const gate::Decision& b) {
  return same_bits(a.penalty.matrix, b.penalty.matrix) && same_bits(a.penalty.h, b.penalty.h) &&
         same_bits(a.move.weights, b.move.weights) && same_bits(a.move.certificate, b.move.certificate) &&
         same_bits(a.move.objective, b.move.objective) && a.move.steps == b.move.steps &&
         same_bits(a.worth.cost, b.worth.cost) && same_bits(a.worth.growth_saved, b.worth.growth_saved) &&
         same_bits(a.worth.horizon_days, b.worth.horizon_days) &&
         same_bits(a.worth.payback_days, b.worth.payback_days) && a.worth.reason == b.worth.reason;
}

double paid(const gate::Problem& problem, const Eigen::VectorXd& to) {
  double out = 0;
  for (Eigen::Index i = 0; i < to.size(); ++i) {
    const auto line = static_cast<std::size_t>(i);
    const double bought = to[i] - problem.held[i];
    out += bought > 0 ? problem.costs.buy[line] * bought : problem.costs.sell[line] * -bought;
  }
  return out;
}

}  // namespace

TEST_CASE("the band") {
  CHECK(seeded == 0);
  CHECK(rc::check("a move ends on the edge of the region: from there the gate stays", [] {
    gate::Problem problem = any_problem(25, 1.0);
    const gate::Decision first = gate::decide(problem);
    RC_CLASSIFY(first.worth.pays);
    problem.held = first.move.weights;
    const gate::Decision second = gate::decide(problem);
    RC_ASSERT(!second.worth.pays);
    RC_ASSERT((second.move.weights - problem.held).cwiseAbs().sum() < 1e-9);
  }));
  CHECK(rc::check("between the wanted weights and the edge nothing moves, to the bit", [] {
    gate::Problem problem = any_problem(25, 1.0);
    const gate::Decision first = gate::decide(problem);
    const double part = *rc::gen::inRange(0, 1000) / 1000.0 * 0.999;
    problem.held = problem.wanted + part * (first.move.weights - problem.wanted);
    const gate::Decision second = gate::decide(problem);
    RC_ASSERT(second.worth.reason == Reason::nothing_to_trade);
    RC_ASSERT(same_bits(second.move.weights, problem.held));
    RC_ASSERT(second.move.steps == 0);
  }));
  CHECK(rc::check(
      "the region is star-shaped around the wanted weights: whoever is outside stays outside further out",
      [] {
        gate::Problem problem = any_problem(10, 0.5);
        const Eigen::VectorXd direction = problem.held - problem.wanted;
        const bool outside = gate::decide(problem).worth.reason != Reason::nothing_to_trade;
        // Costs a side change where a line becomes empty; there the comparison ends.
        const Eigen::VectorXd further = problem.wanted + 1.5 * direction;
        RC_PRE(further.minCoeff() > 0.0 && problem.held.minCoeff() > 0.0);
        problem.held = further;
        RC_ASSERT(!outside || gate::decide(problem).worth.reason != Reason::nothing_to_trade);
      }));
}

TEST_CASE("the order of the lines does not matter") {
  CHECK(rc::check("permuted lines give the permuted answer", [] {
    const gate::Problem problem = any_problem(15, 1.0);
    const Eigen::Index m = problem.held.size();
    std::vector<Eigen::Index> order(static_cast<std::size_t>(m));
    std::iota(order.begin(), order.end(), Eigen::Index{0});
    Random random(*rc::gen::arbitrary<std::uint64_t>());
    std::shuffle(order.begin(), order.end(), random);
    gate::Problem permuted = problem;
    for (Eigen::Index i = 0; i < m; ++i) {
      const auto to = static_cast<std::size_t>(i);
      const Eigen::Index from = order[to];
      permuted.held[i] = problem.held[from];
      permuted.wanted[i] = problem.wanted[from];
      permuted.costs.buy[to] = problem.costs.buy[static_cast<std::size_t>(from)];
      permuted.costs.sell[to] = problem.costs.sell[static_cast<std::size_t>(from)];
      for (Eigen::Index j = 0; j < m; ++j) {
        permuted.covariation(i, j) = problem.covariation(from, order[static_cast<std::size_t>(j)]);
      }
    }
    const gate::Decision one = gate::decide(problem);
    const gate::Decision other = gate::decide(permuted);
    RC_ASSERT(one.worth.reason == other.worth.reason);
    RC_ASSERT(std::abs(one.worth.cost - other.worth.cost) < 1e-12);
    for (Eigen::Index i = 0; i < m; ++i) {
      RC_ASSERT(std::abs(other.move.weights[i] - one.move.weights[order[static_cast<std::size_t>(i)]]) <
                1e-9);
    }
  }));
}

TEST_CASE("dearer trading trades less") {
  // Every cost times k makes the penalty k^(2/3) times as high, so relative to the penalty the costs rise by
  // k^(1/3): the minimum of f + t g has a falling g in t. What falls is therefore the turnover weighted by
  // the costs; with one cost for all lines, the turnover itself.
  CHECK(rc::check("the cost-weighted turnover never rises", [] {
    gate::Problem problem = any_problem(20, 1.0);
    for (std::size_t i = 0; i < problem.costs.buy.size(); ++i) {
      // Away from the floor of 1e-12, which does not scale; one cost for buying and selling keeps their mean.
      problem.costs.buy[i] += 1e-5;
      problem.costs.sell[i] += 1e-5;
    }
    gate::Problem dearer = problem;
    const double k = 1.0 + *rc::gen::inRange(1, 1000) / 100.0;
    for (std::size_t i = 0; i < problem.costs.buy.size(); ++i) {
      dearer.costs.buy[i] *= k;
      dearer.costs.sell[i] *= k;
    }
    const Eigen::VectorXd cheap = gate::decide(problem).move.weights;
    const Eigen::VectorXd dear = gate::decide(dearer).move.weights;
    RC_ASSERT(paid(problem, dear) <= paid(problem, cheap) + 1e-13);
  }));
  CHECK(rc::check("with one cost for all lines the turnover never rises", [] {
    gate::Problem problem = any_problem(20, 1.0);
    const double cost = *rc::gen::inRange(1, 100) * 1e-4;
    std::fill(problem.costs.buy.begin(), problem.costs.buy.end(), cost);
    std::fill(problem.costs.sell.begin(), problem.costs.sell.end(), cost);
    gate::Problem dearer = problem;
    const double k = 1.0 + *rc::gen::inRange(1, 1000) / 100.0;
    std::fill(dearer.costs.buy.begin(), dearer.costs.buy.end(), cost * k);
    std::fill(dearer.costs.sell.begin(), dearer.costs.sell.end(), cost * k);
    const double cheap = (gate::decide(problem).move.weights - problem.held).cwiseAbs().sum();
    const double dear = (gate::decide(dearer).move.weights - problem.held).cwiseAbs().sum();
    RC_ASSERT(dear <= cheap + 1e-10);
  }));
}

TEST_CASE("the same bits") {
  CHECK(rc::check("twice, and from other addresses", [] {
    const gate::Problem problem = any_problem(40, 1.0);
    const gate::Decision first = gate::decide(problem);
    RC_ASSERT(same_bits(gate::decide(problem), first));
    // Copies that lie elsewhere: ballast of odd sizes moves every later allocation.
    const auto ballast = std::make_unique<char[]>(static_cast<std::size_t>(*rc::gen::inRange(1, 5000)));
    const auto copy = std::make_unique<gate::Problem>(problem);
    RC_ASSERT(copy->held.data() != problem.held.data());
    RC_ASSERT(same_bits(gate::decide(*copy), first));
    const std::vector<gate::Edges> one = gate::all_edges(problem, first.penalty);
    const std::vector<gate::Edges> other = gate::all_edges(*copy, first.penalty);
    for (std::size_t i = 0; i < one.size(); ++i) {
      RC_ASSERT(same_bits(one[i].factor_above, other[i].factor_above));
      RC_ASSERT(same_bits(one[i].factor_below, other[i].factor_below));
      RC_ASSERT(same_bits(one[i].way_to_edge, other[i].way_to_edge));
    }
  }));
}

TEST_CASE("ugly inputs") {
  CHECK(rc::check("finite answers on the simplex for zeros, dust and extreme sizes", [] {
    const auto m = static_cast<Eigen::Index>(*rc::gen::inRange(1, 13));
    const auto element = [](std::vector<double> of) { return *rc::gen::elementOf(of); };
    const auto ugly_simplex = [&] {
      Eigen::VectorXd out(m);
      for (Eigen::Index i = 0; i < m; ++i) {
        out[i] = element({0.0, 0.0, 0.0, 5e-324, 1e-300, 1e-17, 1e-12, 1e-3, 0.3, 1.0, 1.0});
      }
      if (!(out.sum() > 1e-200)) {
        out[0] = 1.0;
      }
      const Eigen::VectorXd scaled = out / out.sum();
      return scaled;
    };
    gate::Problem problem;
    problem.held = ugly_simplex();
    problem.wanted = *rc::gen::arbitrary<bool>() ? ugly_simplex() : problem.held;
    Eigen::MatrixXd factors(m, 2);
    const double level = element({0.0, 1e-150, 1e-12, 1e-2, 1.0, 1e6});
    for (Eigen::Index i = 0; i < m; ++i) {
      factors(i, 0) = level * element({0.0, 1.0, 1.0, 1e-6, -3.0});
      factors(i, 1) = level * element({0.0, 1.0, 0.5, 1e-9});
    }
    problem.covariation = factors * factors.transpose();
    problem.covariation.diagonal().array() += level * level * element({0.0, 1e-10, 1e-3, 1.0});
    for (Eigen::Index i = 0; i < m; ++i) {
      problem.costs.buy.push_back(element({0.0, 0.0, 1e-14, 1e-6, 1e-3, 0.05, 0.9}));
      problem.costs.sell.push_back(element({0.0, 0.0, 1e-14, 1e-6, 1e-3, 0.05, 0.9}));
    }
    problem.response = element({0.0, 0.3, 1.0});
    problem.settings.always = element({0.0, 0.0, 1.0}) != 0.0;
    problem.settings.extra_gain = element({0.0, 0.1});

    const gate::Decision decision = gate::decide(problem);
    RC_ASSERT(decision.penalty.matrix.allFinite());
    RC_ASSERT(decision.move.weights.allFinite());
    RC_ASSERT(decision.move.weights.minCoeff() >= 0.0);
    RC_ASSERT(std::abs(decision.move.weights.sum() - 1.0) < 1e-12);
    RC_ASSERT(std::isfinite(decision.worth.cost));
    RC_ASSERT(decision.worth.cost >= 0.0);
    RC_ASSERT(std::isfinite(decision.worth.growth_saved));
    RC_ASSERT(!decision.worth.horizon_days || std::isfinite(*decision.worth.horizon_days));
    RC_ASSERT(!decision.worth.payback_days || std::isfinite(*decision.worth.payback_days));
    if (!problem.settings.always) {
      const double scale = std::max(cost_max(problem), decision.penalty.matrix.diagonal().maxCoeff());
      RC_ASSERT(decision.move.certificate <= 1e-12 * scale);
    }
    for (const gate::Edges& edges : gate::all_edges(problem, decision.penalty)) {
      RC_ASSERT(edges.way_to_edge >= 0.0);
      RC_ASSERT(edges.way_to_edge <= 1.0);
      RC_ASSERT(!edges.factor_above || (*edges.factor_above >= 1.0 - 1e-9 && *edges.factor_above <= 4.0));
      RC_ASSERT(!edges.factor_below || (*edges.factor_below <= 1.0 + 1e-9 && *edges.factor_below >= 0.25));
    }
  }));
}

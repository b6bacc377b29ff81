#include "strategies/gate/covariation.h"

#include <doctest/doctest.h>

#include <Eigen/Dense>
#include <algorithm>
#include <cmath>
#include <cstdint>
#include <cstring>
#include <limits>
#include <random>
#include <span>
#include <stdexcept>
#include <string>
#include <string_view>
#include <utility>
#include <vector>

namespace {

using nightweigh::gate::Covariation;
using Days = std::vector<std::vector<double>>;
using Masks = std::vector<std::vector<std::uint8_t>>;

struct History {
  Days relatives;
  Masks absent;
};

History invented(std::uint64_t seed, std::size_t days, std::size_t m, double chance_of_absence) {
  std::mt19937_64 random(seed);
  std::normal_distribution<double> normal;
  std::uniform_real_distribution<double> chance;
  History out;
  for (std::size_t t = 0; t < days; ++t) {
    const double common = 0.01 * normal(random);
    std::vector<double> x;
    std::vector<std::uint8_t> absent;
    for (std::size_t i = 0; i < m; ++i) {
      const bool away = chance(random) < chance_of_absence;
      absent.push_back(away ? 1 : 0);
      const double relative = std::exp(common + 0.002 * static_cast<double>(i + 1) * normal(random));
      x.push_back(away ? std::numeric_limits<double>::quiet_NaN() : relative);
    }
    out.relatives.push_back(x);
    out.absent.push_back(absent);
  }
  return out;
}

Covariation learned(const History& history, std::size_t m, double half_life) {
  Covariation out(m, half_life);
  for (std::size_t t = 0; t < history.relatives.size(); ++t) {
    out.learn(history.relatives[t], history.absent[t]);
  }
  return out;
}

bool same_bits(const Eigen::MatrixXd& a, const Eigen::MatrixXd& b) {
  return a.size() == b.size() &&
         std::memcmp(a.data(), b.data(), static_cast<std::size_t>(a.size()) * sizeof(double)) == 0;
}

// The estimate from its definition: day weights 2^(-age / half-life), pair by pair, in long double.
Eigen::MatrixXd from_definition(const History& history, std::size_t m, double half_life, bool project) {
  const std::size_t n = history.relatives.size();
  using Matrix = Eigen::Matrix<long double, Eigen::Dynamic, Eigen::Dynamic>;
  const auto size = static_cast<Eigen::Index>(m);
  Matrix s(size, size);
  long double total = 0;
  long double squares = 0;
  for (std::size_t t = 0; t < n; ++t) {
    const long double weight = powl(2.0L, -static_cast<long double>(n - 1 - t) / half_life);
    total += weight;
    squares += weight * weight;
  }
  for (std::size_t i = 0; i < m; ++i) {
    for (std::size_t j = 0; j < m; ++j) {
      long double moment = 0;
      long double weights = 0;
      for (std::size_t t = 0; t < n; ++t) {
        if (history.absent[t][i] != 0 || history.absent[t][j] != 0) {
          continue;
        }
        const long double weight = powl(2.0L, -static_cast<long double>(n - 1 - t) / half_life);
        moment += weight * (history.relatives[t][i] - 1.0L) * (history.relatives[t][j] - 1.0L);
        weights += weight;
      }
      s(static_cast<Eigen::Index>(i), static_cast<Eigen::Index>(j)) = moment / weights;
    }
  }
  if (project) {
    const Eigen::SelfAdjointEigenSolver<Matrix> solver(s);
    const Matrix values = solver.eigenvalues().cwiseMax(0.0L).asDiagonal();
    const Matrix vectors = solver.eigenvectors();
    s = vectors * values * vectors.transpose();
  }
  const long double across = (s.trace() - s.sum() / m) / (m - 1);
  const long double q = 20 / (20 + total * total / squares);
  s = (1 - q) * s + q * across * Matrix::Identity(size, size);
  const long double mean = s.trace() / m;
  s += 1e-3L * mean * Matrix::Identity(size, size);
  return s.cast<double>();
}

}  // namespace

TEST_CASE("the estimate equals its definition") {
  for (const double half_life : {5.0, 60.0, 250.0}) {
    for (const std::size_t days : {1u, 2u, 40u, 600u}) {
      const History history = invented(days, days, 5, 0.0);
      const Covariation covariation = learned(history, 5, half_life);
      const Eigen::MatrixXd expected = from_definition(history, 5, half_life, false);
      CHECK((covariation.estimate() - expected).cwiseAbs().maxCoeff() <
            1e-12 * expected.cwiseAbs().maxCoeff());
      CHECK(covariation.days() == days);
    }
  }
}

TEST_CASE("effective days: one day counts one, and the limit is (1 + d) / (1 - d)") {
  CHECK(Covariation(2, 250.0).effective_days() == 0.0);
  CHECK(learned(invented(1, 1, 2, 0.0), 2, 250.0).effective_days() == doctest::Approx(1.0).epsilon(1e-15));
  // Geometric series: (1/(1-d))^2 / (1/(1-d^2)) = (1+d)/(1-d), d = 2^(-1/10).
  const double d = std::exp2(-0.1);
  CHECK(learned(invented(1, 1000, 2, 0.0), 2, 10.0).effective_days() ==
        doctest::Approx((1 + d) / (1 - d)).epsilon(1e-12));
}

TEST_CASE("one day by hand") {
  // x - 1 = (0.02, -0.01): moment [[4, -2], [-2, 1]] e-4, sum 1e-4, tau = (5e-4 - 0.5e-4) / 1 = 4.5e-4,
  // q = 20/21, so (1/21) S + (20/21) 4.5e-4 I; its trace is (5 + 180)/21 e-4, and 1e-3 of half of that is
  // the ridge.
  Covariation covariation(2, 250.0);
  covariation.learn(std::vector<double>{1.02, 0.99}, std::vector<std::uint8_t>{0, 0});
  const Eigen::MatrixXd s = covariation.estimate();
  const double ridge = 1e-3 * 0.5 * 185.0 / 21.0 * 1e-4;
  CHECK(s(0, 0) == doctest::Approx((4.0 + 90.0) / 21.0 * 1e-4 + ridge).epsilon(1e-13));
  CHECK(s(1, 1) == doctest::Approx((1.0 + 90.0) / 21.0 * 1e-4 + ridge).epsilon(1e-13));
  CHECK(s(0, 1) == doctest::Approx(-2.0 / 21.0 * 1e-4).epsilon(1e-13));
  CHECK(s(0, 1) == s(1, 0));
}

TEST_CASE("day 0, days without any move, and one line alone") {
  CHECK(Covariation(3, 250.0).estimate() == Eigen::MatrixXd::Identity(3, 3));
  Covariation still(3, 250.0);
  still.learn(std::vector<double>{1, 1, 1}, std::vector<std::uint8_t>{0, 0, 0});
  CHECK(still.estimate() == Eigen::MatrixXd::Identity(3, 3));
  still.learn(std::vector<double>{1, 1, 1}, std::vector<std::uint8_t>{0, 1, 0});
  CHECK(still.estimate() == Eigen::MatrixXd::Identity(3, 3));
  Covariation one(1, 250.0);
  one.learn(std::vector<double>{1.01}, std::vector<std::uint8_t>{0});
  CHECK(one.estimate()(0, 0) == doctest::Approx(1.001e-4).epsilon(1e-12));
}

TEST_CASE("absent lines: each pair over its own days, projected to positive semidefinite") {
  int projected = 0;
  for (std::uint64_t seed = 1; seed <= 20; ++seed) {
    const std::size_t days = seed % 2 == 0 ? 12 : 300;  // few days: pairs disagree, and the projection works
    const History history = invented(seed, days, 6, 0.3);
    bool every_pair = true;
    for (std::size_t i = 0; i < 6; ++i) {
      for (std::size_t j = 0; j < 6; ++j) {
        bool met = false;
        for (const auto& absent : history.absent) {
          met = met || (absent[i] == 0 && absent[j] == 0);
        }
        every_pair = every_pair && met;
      }
    }
    REQUIRE(every_pair);
    const Eigen::MatrixXd estimate = learned(history, 6, 100.0).estimate();
    const Eigen::MatrixXd expected = from_definition(history, 6, 100.0, true);
    CHECK((estimate - expected).cwiseAbs().maxCoeff() < 1e-12 * expected.cwiseAbs().maxCoeff());
    const Eigen::MatrixXd raw = from_definition(history, 6, 100.0, false);
    projected += (raw - expected).cwiseAbs().maxCoeff() > 1e-8 * expected.cwiseAbs().maxCoeff() ? 1 : 0;
    const Eigen::SelfAdjointEigenSolver<Eigen::MatrixXd> solver(estimate);
    CHECK(solver.eigenvalues()[0] > 0.0);
  }
  CHECK(projected > 3);
}

TEST_CASE("a line that has never been there gets the others' mean variance") {
  Covariation covariation(3, 250.0);
  for (int t = 0; t < 100; ++t) {
    const double up = t % 2 == 0 ? 1.01 : 0.99;
    covariation.learn(std::vector<double>{up, 2.0 - up, std::nan("")}, std::vector<std::uint8_t>{0, 0, 1});
  }
  const Eigen::MatrixXd s = covariation.estimate();
  CHECK(s.allFinite());
  CHECK(s(2, 2) == doctest::Approx(s(0, 0)).epsilon(1e-12));
  CHECK(s(2, 0) == 0.0);
}

TEST_CASE("saved and loaded it goes on as if nothing had happened, to the bit") {
  for (const double chance : {0.0, 0.1}) {
    const History history = invented(77, 120, 7, chance);
    Covariation whole(7, 60.0);
    Covariation resumed(7, 60.0);
    for (std::size_t t = 0; t < history.relatives.size(); ++t) {
      whole.learn(history.relatives[t], history.absent[t]);
      Covariation loaded;
      REQUIRE(Covariation::load(resumed.save(), loaded));
      CHECK(loaded.save() == resumed.save());
      resumed = std::move(loaded);
      resumed.learn(history.relatives[t], history.absent[t]);
    }
    CHECK(resumed.save() == whole.save());
    CHECK(same_bits(resumed.estimate(), whole.estimate()));
    CHECK(resumed.days() == 120);
  }
}

TEST_CASE("bytes that are not a state are turned away, and nothing is touched") {
  const Covariation good = learned(invented(5, 30, 4, 0.1), 4, 60.0);
  const std::string bytes = good.save();
  Covariation target = learned(invented(6, 3, 2, 0.0), 2, 60.0);
  const std::string before = target.save();
  for (std::size_t length = 0; length < bytes.size(); ++length) {
    CHECK_FALSE(Covariation::load(std::string_view(bytes).substr(0, length), target));
  }
  CHECK_FALSE(Covariation::load(bytes + '\0', target));
  const auto with = [&](std::size_t at, const std::string& replacement) {
    std::string changed = bytes;
    changed.replace(at, replacement.size(), replacement);
    return changed;
  };
  const auto number = [](double value) {
    std::string out(sizeof value, '\0');
    std::memcpy(out.data(), &value, sizeof value);
    return out;
  };
  CHECK_FALSE(Covariation::load(with(0, "X"), target));                      // magic
  CHECK_FALSE(Covariation::load(with(8, "\2"), target));                     // format
  CHECK_FALSE(Covariation::load(with(12, "\3"), target));                    // flags
  CHECK_FALSE(Covariation::load(with(12, std::string(1, '\0')), target));    // no absences: too long
  CHECK_FALSE(Covariation::load(with(16, "\5"), target));                    // m
  CHECK_FALSE(Covariation::load(with(16, std::string(8, '\xff')), target));  // m that overflows
  CHECK_FALSE(Covariation::load(with(16, std::string(8, '\0')), target));    // no lines
  CHECK_FALSE(Covariation::load(with(24, std::string(8, '\0')), target));    // day 0 with weights
  CHECK_FALSE(Covariation::load(with(32, number(1.5)), target));             // decay
  CHECK_FALSE(Covariation::load(with(40, number(-1.0)), target));            // sum of weights
  CHECK_FALSE(Covariation::load(with(48, number(std::nan(""))), target));    // of their squares
  CHECK_FALSE(Covariation::load(with(56, number(-1e-4)), target));           // a variance
  CHECK_FALSE(Covariation::load(with(64, number(std::numeric_limits<double>::infinity())), target));
  CHECK(target.save() == before);
  CHECK(Covariation::load(bytes, target));
  CHECK(target.save() == bytes);
}

TEST_CASE("the estimate's bits depend on the numbers alone") {
  const History history = invented(9, 50, 33, 0.05);
  const Covariation first = learned(history, 33, 60.0);
  const Eigen::MatrixXd reference = first.estimate();
  std::vector<std::string> ballast;
  for (std::size_t shift = 1; shift <= 8; ++shift) {
    ballast.emplace_back(shift * 24 + 1, 'x');  // other heap addresses
    std::vector<double> room(33 + shift);
    Covariation again(33, 60.0);
    for (std::size_t t = 0; t < history.relatives.size(); ++t) {
      const std::span<double> shifted(room.data() + shift, 33);
      std::copy(history.relatives[t].begin(), history.relatives[t].end(), shifted.begin());
      again.learn(shifted, history.absent[t]);
    }
    CHECK(same_bits(again.estimate(), reference));
    CHECK(again.save() == first.save());
  }
}

TEST_CASE("arguments out of their domain are a bug of the caller") {
  CHECK_THROWS_AS(Covariation(0, 250.0), std::logic_error);
  CHECK_THROWS_AS(Covariation(2, 0.0), std::logic_error);
  CHECK_THROWS_AS(Covariation(2, std::nan("")), std::logic_error);
  Covariation covariation(2, 250.0);
  CHECK_THROWS_AS(covariation.learn(std::vector<double>{1.0}, std::vector<std::uint8_t>{0}),
                  std::logic_error);
}

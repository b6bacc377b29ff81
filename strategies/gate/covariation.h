// The covariation of the lines' daily relatives: exponentially weighted second moment of (x - 1).
#pragma once

#include <Eigen/Dense>
#include <cstdint>
#include <span>
#include <string>
#include <string_view>

#include "strategies/numerics/numerics.h"

namespace nightweigh::gate {

// State is plain doubles; learn() costs O(m^2). save()/load() are bit-exact.
class Covariation {
 public:
  Covariation() = default;
  // m >= 1 lines (cash included); half_life_days > 0.
  Covariation(std::size_t m, double half_life_days);

  std::size_t size() const { return static_cast<std::size_t>(sums_.rows()); }
  std::uint64_t days() const { return days_; }

  // Folds one day. relatives: m values; a line with absent[i] != 0 takes no part in its pairs that day.
  void learn(std::span<const double> relatives, std::span<const std::uint8_t> absent);

  // The estimate S of design: bias-corrected moment, shrunk towards a common variance by
  // q = 20/(20 + n_eff), plus a ridge of 1e-3 of the mean variance; the identity on day 0 or when
  // nothing has moved. Where lines were absent: pairwise available days, then projected to positive
  // semidefinite. O(m^2), O(m^3) with absences.
  Eigen::MatrixXd estimate() const;

  // Little-endian doubles with a header; load gives back exactly what was saved, or nullopt (wrapped in
  // a default object with size() == 0) when the bytes are not of this form or not of this m.
  std::string save() const;
  static bool load(std::string_view bytes, Covariation& out);

 private:
  double decay_ = 1.0;
  std::uint64_t days_ = 0;
  bool complete_ = true;    // no line was ever absent
  Eigen::MatrixXd sums_;     // decayed sums of (x_i - 1)(x_j - 1)
  Eigen::MatrixXd weights_;  // decayed numbers of days in each pair
  double weight_squares_ = 0.0;  // decayed sum of squared day weights, for n_eff
};

}  // namespace nightweigh::gate

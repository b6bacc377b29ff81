// The covariation of the lines' daily relatives: exponentially weighted second moment of (x - 1).
//
// Second moments about 1, not about the mean: a day's mean is far below its noise, and no estimated mean
// enters the gate. The shrinkage draws the moment towards one common variance across the simplex, as in
// Ledoit and Wolf (J. Multivariate Anal. 88, 2004), with a fixed share instead of an estimated one.
#pragma once

#include <Eigen/Dense>
#include <cstddef>
#include <cstdint>
#include <span>
#include <string>
#include <string_view>

namespace nightweigh::gate {

// State is plain doubles; learn() costs O(m^2). save()/load() are bit-exact.
class Covariation {
 public:
  Covariation() = default;
  // m >= 1 lines (cash included); half_life_days > 0: a day counts half as much after so many later days.
  // Throws std::logic_error outside these domains.
  Covariation(std::size_t m, double half_life_days);

  std::size_t size() const { return static_cast<std::size_t>(sums_.rows()); }
  std::uint64_t days() const { return days_; }
  // (sum w)^2 / sum w^2 over the day weights w; 0 on day 0.
  double effective_days() const;

  // Folds one day. relatives and absent: m values each; finite where not absent. A line with absent[i] != 0
  // takes no part in its pairs that day, and its relative is not looked at. Throws std::logic_error where the
  // sizes differ.
  void learn(std::span<const double> relatives, std::span<const std::uint8_t> absent);

  // The estimate S: bias-corrected moment (1-q) S + q tau I with tau = (tr S - 1'S1/m)/(m-1) and
  // q = 20/(20 + effective_days()), plus a ridge of 1e-3 of the mean variance; the identity on day 0 or when
  // nothing has moved. Where lines were absent: each pair over the days it was there, then projected to
  // positive semidefinite (a line never there has the others' mean variance and no covariation). Symmetric
  // to the bit, units of squared daily relative. O(m^2), O(m^3) with absences.
  Eigen::MatrixXd estimate() const;

  // The state as bytes: magic "NWCOVAR\0", u32 format, u32 flags (1: lines were absent), u64 m, u64 days,
  // doubles decay, sum of day weights, sum of their squares, then the lower triangle of the decayed sums by
  // columns, then, with flag 1, that of the pairs' weights. Little-endian, IEEE 754. Saving what was loaded
  // gives the same bytes. They carry no digest: whoever stores them does.
  std::string save() const;
  // Fills `out` and answers true; answers false and leaves `out` alone where the bytes are not of this form
  // (size, magic, format, a number that no state can have). Any m is accepted: compare size().
  static bool load(std::string_view bytes, Covariation& out);

 private:
  void weigh_pairs();

  double decay_ = 1.0;
  std::uint64_t days_ = 0;
  double weight_ = 0.0;          // decayed number of days
  double weight_squares_ = 0.0;  // decayed sum of squared day weights
  Eigen::MatrixXd sums_;         // decayed sums of (x_i - 1)(x_j - 1)
  Eigen::MatrixXd
      pair_weights_;  // decayed numbers of days in each pair; empty while every line has been there
};

}  // namespace nightweigh::gate

// Exponentiated gradient with a fixed learning rate.
//
//   w_i <- w_i exp(eta x_i / (w.x)) / Z,  w = 1/m at the start
//
// Helmbold, Schapire, Singer, Warmuth, "On-line portfolio selection using multiplicative updates",
// Mathematical Finance 8 (1998) 325-347. With each day's relatives scaled so that the largest is 1 and r
// the smallest of them all, the log wealth is within ln(m)/eta + eta n/(8 r^2) of the best constant mix.
//
// The state is the logarithm of the weights up to a constant, so that no weight is ever stuck at 0 by
// underflow. An absent line takes the gradient 1: it earns what the portfolio of the present lines earns.
#pragma once

#include "strategies/interface/choice.h"
#include "strategies/interface/strategy.h"

namespace nightweigh::strategies {

// Format number of the saved state; raised with each change of what the values mean.
inline constexpr std::uint32_t exponentiated_gradient_format = 1;

class ExponentiatedGradient final : public Strategy {
 public:
  // choice.rule == "exponentiated_gradient", 0 < eta <= 1, m >= 1; refused otherwise.
  static Outcome<std::unique_ptr<Strategy>> make(const Choice& choice);
  static Outcome<std::unique_ptr<Strategy>> load(const Choice& choice, std::string_view bytes);

  std::string_view rule() const override { return "exponentiated_gradient"; }
  std::size_t size() const override { return choice_.m; }
  Outcome<void> learn(const Day& day) override;  // O(m)
  std::vector<double> weights() const override { return weights_; }
  std::vector<double> numerical_error() const override;
  double response() const override { return choice_.eta; }
  std::uint64_t days() const override { return days_; }
  std::string save() const override;
  std::unique_ptr<Strategy> clone() const override;

 private:
  explicit ExponentiatedGradient(Choice choice);
  void weigh();  // weights_ from log_weights_

  Choice choice_;
  std::uint64_t days_ = 0;
  std::vector<double> log_weights_;  // largest is 0
  std::vector<double> weights_;
  double log_weight_error_ = 0;  // first-order bound of the rounding error in any log weight
};

}  // namespace nightweigh::strategies

// Constant mix (constant rebalanced portfolio): the same wanted weights every day.
#pragma once

#include "strategies/interface/choice.h"
#include "strategies/interface/strategy.h"

namespace nightweigh::strategies {

inline constexpr std::uint32_t constant_mix_format = 1;

class ConstantMix final : public Strategy {
 public:
  // choice.weights: m values >= 0 with sum 1 within 1e-12, or empty for 1/m each; refused otherwise.
  static Outcome<std::unique_ptr<Strategy>> make(const Choice& choice);
  static Outcome<std::unique_ptr<Strategy>> load(const Choice& choice, std::string_view bytes);

  std::string_view rule() const override { return "constant_mix"; }
  std::size_t size() const override { return choice_.m; }
  Outcome<void> learn(const Day& day) override;
  std::vector<double> weights() const override { return weights_; }
  std::vector<double> numerical_error() const override { return std::vector<double>(choice_.m, 0.0); }
  double response() const override { return 0.0; }
  std::uint64_t days() const override { return days_; }
  std::string save() const override;
  std::unique_ptr<Strategy> clone() const override;

 private:
  explicit ConstantMix(Choice choice);

  Choice choice_;
  std::vector<double> weights_;
  std::uint64_t days_ = 0;
};

}  // namespace nightweigh::strategies

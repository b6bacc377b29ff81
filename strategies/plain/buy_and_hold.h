// Buy and hold: equal weights at the start, then whatever the market makes of them.
//
//   w_i <- w_i x_i / (w.x)
//
// An absent line earns what the present ones earn together, so its weight stays.
#pragma once

#include "strategies/interface/choice.h"
#include "strategies/interface/strategy.h"

namespace nightweigh::strategies {

inline constexpr std::uint32_t buy_and_hold_format = 1;

class BuyAndHold final : public Strategy {
 public:
  static Outcome<std::unique_ptr<Strategy>> make(const Choice& choice);  // m >= 1
  static Outcome<std::unique_ptr<Strategy>> load(const Choice& choice, std::string_view bytes);

  std::string_view rule() const override { return "buy_and_hold"; }
  std::size_t size() const override { return choice_.m; }
  Outcome<void> learn(const Day& day) override;  // O(m)
  std::vector<double> weights() const override { return weights_; }
  std::vector<double> numerical_error() const override;
  double response() const override { return 1.0; }
  std::uint64_t days() const override { return days_; }
  std::string save() const override;
  std::unique_ptr<Strategy> clone() const override;

 private:
  explicit BuyAndHold(Choice choice);

  Choice choice_;
  std::vector<double> weights_;
  std::uint64_t days_ = 0;
};

}  // namespace nightweigh::strategies

#include "strategies/plain/buy_and_hold.h"

#include <cmath>
#include <limits>

#include "strategies/interface/saved_state.h"
#include "strategies/numerics/numerics.h"

namespace nightweigh::strategies {

BuyAndHold::BuyAndHold(Choice choice)
    : choice_(std::move(choice)), weights_(choice_.m, 1.0 / static_cast<double>(choice_.m)) {}

Outcome<std::unique_ptr<Strategy>> BuyAndHold::make(const Choice& choice) {
  if (choice.m < 1) return refuse("no lines", "give at least one line");
  return std::unique_ptr<Strategy>(new BuyAndHold(choice));
}

Outcome<std::unique_ptr<Strategy>> BuyAndHold::load(const Choice& choice, std::string_view bytes) {
  Outcome<std::unique_ptr<Strategy>> made = make(choice);
  if (!made) return made;
  Outcome<StateBytes> state = load_state(choice, buy_and_hold_format, choice.m, bytes);
  if (!state) return tl::unexpected<Refusal>(state.error());
  auto& strategy = static_cast<BuyAndHold&>(**made);
  strategy.days_ = state->days;
  strategy.weights_ = std::move(state->values);
  return made;
}

Outcome<void> BuyAndHold::learn(const Day& day) {
  if (Outcome<void> fine = check_day(day, choice_.m); !fine) return fine;
  std::vector<double> present(choice_.m), relatives(choice_.m);
  for (std::size_t i = 0; i < choice_.m; ++i) {
    present[i] = day.absent[i] == 0 ? weights_[i] : 0.0;
    relatives[i] = day.absent[i] == 0 ? day.relatives[i] : 0.0;
  }
  const double mass = numerics::sum(present);
  if (!(mass > 0)) {  // every line with weight is absent: nothing moves
    ++days_;
    return {};
  }
  const double portfolio = numerics::dot(present, relatives) / mass;
  if (!(portfolio > 0 && std::isfinite(portfolio))) {
    return refuse("the portfolio's return that day is " + std::to_string(portfolio),
                  "a portfolio that is worth nothing cannot be held on: look at the closes");
  }
  std::vector<double> grown(choice_.m);
  for (std::size_t i = 0; i < choice_.m; ++i) {
    grown[i] = day.absent[i] == 0 ? weights_[i] * relatives[i] : weights_[i] * portfolio;
  }
  const double total = numerics::sum(grown);
  for (double& weight : grown) weight /= total;
  weights_ = std::move(grown);
  ++days_;
  return {};
}

std::vector<double> BuyAndHold::numerical_error() const {
  // Each day adds two products, a division and the common rounding of the total, which cancels.
  constexpr double unit_roundoff = std::numeric_limits<double>::epsilon() / 2;
  const double relative =
      unit_roundoff * static_cast<double>(days_ + 1) * (static_cast<double>(choice_.m) / 8 + 8);
  std::vector<double> error(choice_.m);
  for (std::size_t i = 0; i < choice_.m; ++i) error[i] = weights_[i] * relative;
  return error;
}

std::string BuyAndHold::save() const {
  return save_state(choice_, buy_and_hold_format, days_, weights_);
}

std::unique_ptr<Strategy> BuyAndHold::clone() const {
  return std::unique_ptr<Strategy>(new BuyAndHold(*this));
}

}  // namespace nightweigh::strategies

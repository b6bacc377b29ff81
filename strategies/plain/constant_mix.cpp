#include "strategies/plain/constant_mix.h"

#include <cmath>

#include "strategies/interface/saved_state.h"
#include "strategies/numerics/numerics.h"

namespace nightweigh::strategies {

ConstantMix::ConstantMix(Choice choice) : choice_(std::move(choice)), weights_(choice_.weights) {
  if (weights_.empty()) weights_.assign(choice_.m, 1.0 / static_cast<double>(choice_.m));
}

Outcome<std::unique_ptr<Strategy>> ConstantMix::make(const Choice& choice) {
  if (choice.m < 1) return refuse("no lines", "give at least one line");
  if (!choice.weights.empty()) {
    if (choice.weights.size() != choice.m) {
      return refuse(
          std::to_string(choice.weights.size()) + " weights for " + std::to_string(choice.m) + " lines",
          "give one weight for each line");
    }
    for (std::size_t i = 0; i < choice.m; ++i) {
      if (!(choice.weights[i] >= 0) || !std::isfinite(choice.weights[i])) {
        return refuse("the weight of line " + std::to_string(i) + " is " + std::to_string(choice.weights[i]),
                      "weights are finite and not negative");
      }
    }
    const double total = numerics::sum(choice.weights);
    if (!(std::abs(total - 1) <= 1e-12)) {
      return refuse("the weights sum to " + std::to_string(total), "weights sum to 1");
    }
  }
  return std::unique_ptr<Strategy>(new ConstantMix(choice));
}

Outcome<std::unique_ptr<Strategy>> ConstantMix::load(const Choice& choice, std::string_view bytes) {
  Outcome<std::unique_ptr<Strategy>> made = make(choice);
  if (!made) return made;
  Outcome<StateBytes> state = load_state(choice, constant_mix_format, 0, bytes);
  if (!state) return tl::unexpected<Refusal>(state.error());
  static_cast<ConstantMix&>(**made).days_ = state->days;
  return made;
}

Outcome<void> ConstantMix::learn(const Day& day) {
  if (Outcome<void> fine = check_day(day, choice_.m); !fine) return fine;
  ++days_;
  return {};
}

std::string ConstantMix::save() const {
  return save_state(choice_, constant_mix_format, days_, {});
}

std::unique_ptr<Strategy> ConstantMix::clone() const {
  return std::unique_ptr<Strategy>(new ConstantMix(*this));
}

}  // namespace nightweigh::strategies

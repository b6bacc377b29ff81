#include "strategies/exponentiated_gradient/exponentiated_gradient.h"

#include <algorithm>
#include <cmath>
#include <limits>

#include "strategies/interface/saved_state.h"
#include "strategies/numerics/numerics.h"

namespace nightweigh::strategies {

namespace {

constexpr double unit_roundoff = std::numeric_limits<double>::epsilon() / 2;

// Rounding errors in one dot product of m terms over 8 lanes, and the few operations around it.
double operations(std::size_t m) {
  return static_cast<double>(m) / 8 + 16;
}

}  // namespace

ExponentiatedGradient::ExponentiatedGradient(Choice choice)
    : choice_(std::move(choice)), log_weights_(choice_.m, 0.0), weights_(choice_.m) {
  weigh();
}

Outcome<std::unique_ptr<Strategy>> ExponentiatedGradient::make(const Choice& choice) {
  if (choice.m < 1) return refuse("no lines", "give at least one line");
  if (!(choice.eta > 0 && choice.eta <= 1)) {
    return refuse("eta is " + std::to_string(choice.eta),
                  "eta lies above 0 and at most at 1; 0.05 is common in print");
  }
  return std::unique_ptr<Strategy>(new ExponentiatedGradient(choice));
}

Outcome<std::unique_ptr<Strategy>> ExponentiatedGradient::load(const Choice& choice, std::string_view bytes) {
  Outcome<std::unique_ptr<Strategy>> made = make(choice);
  if (!made) return made;
  Outcome<StateBytes> state = load_state(choice, exponentiated_gradient_format, choice.m + 1, bytes);
  if (!state) return tl::unexpected<Refusal>(state.error());
  auto& strategy = static_cast<ExponentiatedGradient&>(**made);
  strategy.days_ = state->days;
  strategy.log_weight_error_ = state->values.back();
  state->values.pop_back();
  strategy.log_weights_ = std::move(state->values);
  strategy.weigh();
  return made;
}

void ExponentiatedGradient::weigh() {
  numerics::exp(log_weights_, weights_);
  const double total = numerics::sum(weights_);
  for (double& weight : weights_) weight /= total;
}

Outcome<void> ExponentiatedGradient::learn(const Day& day) {
  if (Outcome<void> fine = check_day(day, choice_.m); !fine) return fine;
  // Return of the portfolio on the present lines: sum w x / sum w. Where lines are absent, the present ones
  // are weighed afresh: beside a heavy absent line their weights may all have left the range of doubles.
  double largest_present = -std::numeric_limits<double>::infinity();
  bool any_absent = false;
  for (std::size_t i = 0; i < choice_.m; ++i) {
    any_absent = any_absent || day.absent[i] != 0;
    if (day.absent[i] == 0) largest_present = std::max(largest_present, log_weights_[i]);
  }
  std::vector<double> present(choice_.m), relatives(choice_.m);
  for (std::size_t i = 0; i < choice_.m; ++i) {
    if (day.absent[i] != 0) continue;
    present[i] = any_absent ? numerics::exp(log_weights_[i] - largest_present) : weights_[i];
    relatives[i] = day.relatives[i];
  }
  const double mass = numerics::sum(present);  // 0 only where every line is absent
  const double portfolio = numerics::dot(present, relatives) / mass;
  if (mass > 0 && !(portfolio > 0 && std::isfinite(portfolio))) {
    return refuse("the portfolio's return that day is " + std::to_string(portfolio),
                  "such a day cannot be learned: look at the closes");
  }
  std::vector<double> updated = log_weights_;
  double largest_gradient = 1.0;
  for (std::size_t i = 0; i < choice_.m; ++i) {
    const double gradient = day.absent[i] == 0 ? relatives[i] / portfolio : 1.0;
    largest_gradient = std::max(largest_gradient, gradient);
    updated[i] += choice_.eta * gradient;
  }
  const double largest = *std::max_element(updated.begin(), updated.end());
  for (double& log_weight : updated) log_weight -= largest;
  if (!std::all_of(updated.begin(), updated.end(), [](double value) { return std::isfinite(value); })) {
    return refuse("a relative is too far from the others for the weights to stay finite",
                  "such a day cannot be learned: look at the closes");
  }
  // A log weight is rounded twice a day at its own size: for constant relatives always to the same side.
  const double furthest = -*std::min_element(updated.begin(), updated.end());
  log_weight_error_ +=
      unit_roundoff * (choice_.eta * largest_gradient * operations(choice_.m) + 4 + 2 * furthest);
  log_weight_error_ = std::min(log_weight_error_, 1.0);  // as good as nothing known; stays finite
  log_weights_ = std::move(updated);
  ++days_;
  weigh();
  return {};
}

std::vector<double> ExponentiatedGradient::numerical_error() const {
  std::vector<double> error(choice_.m);
  const double relative = 2 * log_weight_error_ + operations(choice_.m) * unit_roundoff;
  // Beyond first order, the weights' own range is all that is known.
  for (std::size_t i = 0; i < choice_.m; ++i) error[i] = relative < 0.5 ? weights_[i] * relative : 1.0;
  return error;
}

std::string ExponentiatedGradient::save() const {
  std::vector<double> values = log_weights_;
  values.push_back(log_weight_error_);
  return save_state(choice_, exponentiated_gradient_format, days_, std::move(values));
}

std::unique_ptr<Strategy> ExponentiatedGradient::clone() const {
  return std::unique_ptr<Strategy>(new ExponentiatedGradient(*this));
}

}  // namespace nightweigh::strategies

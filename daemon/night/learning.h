// Steps 3 and 5 of the night: price relatives, and what the strategy and the covariation make of them.
#pragma once

#include <memory>
#include <string>
#include <vector>

#include "daemon/night/night.h"

namespace nightweigh::night {

// Total-return relative of each line: (split * close + dividend) / previous close, the dividend a share
// before the split; cash: 1 + yearly_rate * calendar days / 365. The numerator is exact before the division.
std::vector<double> price_relatives(const BookState& state, const ClosesOfTheDay& closes,
                                    const BookSettings& settings);

struct Learner {
  std::shared_ptr<const strategies::Strategy> strategy;
  gate::Covariation covariation;
};

// The learner after the nights of `history` (from nothing), or a refusal in words.
strategies::Outcome<Learner> rebuilt_learner(const BookSettings& settings, const History& history);

// `learner` after one more day.
strategies::Outcome<Learner> learned(const Learner& learner, const BookSettings& settings,
                                     const std::vector<double>& relatives,
                                     const std::vector<std::uint8_t>& absent);

// Whether the state's learner is one that the settings ask for.
bool has_learner(const BookState& state, const BookSettings& settings);

// The strategy's weights as shares of the whole book: instruments scaled by 1 - reserve and cash at the
// reserve, unless cash is in the mix.
std::vector<double> over_all_lines(const std::vector<double>& strategy_values, const BookSettings& settings,
                                   double cash_value);

}  // namespace nightweigh::night

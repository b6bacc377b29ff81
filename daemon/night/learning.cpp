#include "daemon/night/learning.h"

#include "strategies/registry.h"

namespace nightweigh::night {

std::vector<double> price_relatives(const BookState& state, const ClosesOfTheDay& closes,
                                    const BookSettings& settings) {
  std::vector<double> relatives(settings.line_count(), 1.0);
  if (!state.last_night) return relatives;
  for (std::size_t line = 0; line < settings.instruments.size(); ++line) {
    const Close& close = *closes.closes[line];
    const Decimal value = close.split.value_or(Decimal(1)) * close.close + close.dividend.value_or(Decimal());
    relatives[line] = value.to_double() / state.closes[line].to_double();
  }
  const double days = closes.date.days_since(*state.last_night);
  relatives[settings.cash_index()] = 1.0 + settings.cash.yearly_rate.to_double() * days / 365.0;
  return relatives;
}

namespace {

// A day cut to the lines that the strategy weighs.
strategies::Outcome<void> learn_day(strategies::Strategy& strategy, const std::vector<double>& relatives,
                                    const std::vector<std::uint8_t>& absent) {
  return strategy.learn(
      {std::span(relatives).first(strategy.size()), std::span(absent).first(strategy.size())});
}

}  // namespace

strategies::Outcome<Learner> learned(const Learner& learner, const BookSettings& settings,
                                     const std::vector<double>& relatives,
                                     const std::vector<std::uint8_t>& absent) {
  std::shared_ptr<strategies::Strategy> strategy = learner.strategy->clone();
  if (strategies::Outcome<void> fine = learn_day(*strategy, relatives, absent); !fine) {
    return tl::unexpected<strategies::Refusal>(fine.error());
  }
  Learner out{std::move(strategy), learner.covariation};
  if (out.covariation.size() == 0) {
    out.covariation = gate::Covariation(settings.line_count(), settings.gate.half_life_days);
  }
  out.covariation.learn(relatives, absent);
  return out;
}

strategies::Outcome<Learner> rebuilt_learner(const BookSettings& settings, const History& history) {
  strategies::Outcome<std::unique_ptr<strategies::Strategy>> made =
      strategies::make_strategy(strategy_choice(settings));
  if (!made) return tl::unexpected<strategies::Refusal>(made.error());
  Learner learner{std::move(*made), gate::Covariation(settings.line_count(), settings.gate.half_life_days)};
  std::shared_ptr<strategies::Strategy> strategy = learner.strategy->clone();
  for (const HistoryDay& day : history) {
    if (day.relatives.size() != settings.line_count() || day.absent.size() != settings.line_count()) {
      return strategies::refuse(day.date.to_string() + ": the recorded night has another number of lines",
                                "restore the database from a backup");
    }
    if (strategies::Outcome<void> fine = learn_day(*strategy, day.relatives, day.absent); !fine) {
      return strategies::refuse(day.date.to_string() + ": " + fine.error().problem, fine.error().remedy);
    }
    learner.covariation.learn(day.relatives, day.absent);
  }
  learner.strategy = std::move(strategy);
  return learner;
}

bool has_learner(const BookState& state, const BookSettings& settings) {
  return state.strategy != nullptr && state.strategy->rule() == settings.strategy.rule &&
         state.strategy->size() == strategy_choice(settings).m &&
         state.covariation.size() == settings.line_count();
}

std::vector<double> over_all_lines(const std::vector<double>& strategy_values, const BookSettings& settings,
                                   double cash_value) {
  if (settings.cash.in_mix) return strategy_values;
  std::vector<double> values(settings.line_count(), cash_value);
  for (std::size_t line = 0; line < settings.instruments.size(); ++line) {
    values[line] = (1.0 - settings.cash.reserve) * strategy_values[line];
  }
  return values;
}

}  // namespace nightweigh::night

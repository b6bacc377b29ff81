#include "daemon/night/book_state.h"

namespace nightweigh::night {

strategies::Choice strategy_choice(const BookSettings& settings) {
  strategies::Choice choice;
  choice.rule = settings.strategy.rule;
  choice.m = settings.instruments.size() + (settings.cash.in_mix ? 1 : 0);
  choice.eta = settings.strategy.eta;
  if (!settings.strategy.weights.empty()) {
    for (std::size_t line = 0; line < choice.m; ++line) {
      const auto weight = settings.strategy.weights.find(settings.line_name(line));
      choice.weights.push_back(weight == settings.strategy.weights.end() ? 0.0 : weight->second);
    }
  }
  return choice;
}

BookState initial_state(const BookSettings& settings) {
  BookState state;
  state.account.quantities.assign(settings.instruments.size(), Decimal());
  return state;
}

}  // namespace nightweigh::night

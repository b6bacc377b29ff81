#include "strategies/interface/strategy.h"

#include <cmath>

namespace nightweigh::strategies {

Outcome<void> Strategy::learn_block(std::span<const Day> days) {
  for (std::size_t i = 0; i < days.size(); ++i) {
    Outcome<void> learned = learn(days[i]);
    if (!learned) {
      return refuse("day " + std::to_string(i) + " of the block: " + learned.error().problem,
                    learned.error().remedy);
    }
  }
  return {};
}

Outcome<void> check_day(const Day& day, std::size_t m) {
  if (day.relatives.size() != m || day.absent.size() != m) {
    return refuse("a day of " + std::to_string(day.relatives.size()) + " relatives and " +
                      std::to_string(day.absent.size()) + " marks for " + std::to_string(m) + " lines",
                  "give one relative and one mark for each line");
  }
  bool any_present = false, any_positive = false;
  for (std::size_t i = 0; i < m; ++i) {
    if (day.absent[i] != 0) continue;
    any_present = true;
    const double x = day.relatives[i];
    if (!(x >= 0) || !std::isfinite(x)) {
      return refuse("the relative of line " + std::to_string(i) + " is " + std::to_string(x),
                    "price relatives are finite and not negative");
    }
    any_positive = any_positive || x > 0;
  }
  if (any_present && !any_positive) {
    return refuse("every present line has relative 0", "a day on which everything is lost cannot be learned");
  }
  return {};
}

}  // namespace nightweigh::strategies

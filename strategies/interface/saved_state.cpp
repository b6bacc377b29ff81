#include "strategies/interface/saved_state.h"

#include <cmath>

namespace nightweigh::strategies {

std::string save_state(const Choice& choice, std::uint32_t format, std::uint64_t days,
                       std::vector<double> values) {
  return write_state({format, choice.rule, choice.m, choice.digest(), days, std::move(values)});
}

Outcome<StateBytes> load_state(const Choice& choice, std::uint32_t format, std::size_t value_count,
                               std::string_view bytes) {
  const char* remedy = "rebuild the state from the stored history";
  Outcome<StateBytes> state = read_state(bytes);
  if (!state) return state;
  if (state->rule != choice.rule) {
    return refuse("the state is of rule " + state->rule + ", the book runs " + choice.rule, remedy);
  }
  if (state->format != format) {
    return refuse("the state has format " + std::to_string(state->format) + ", this version reads " +
                      std::to_string(format),
                  remedy);
  }
  if (state->m != choice.m) {
    return refuse(
        "the state has " + std::to_string(state->m) + " lines, the book " + std::to_string(choice.m), remedy);
  }
  if (state->choice_digest != choice.digest()) {
    return refuse("the state was learned with other parameters than " + choice.canonical_text(), remedy);
  }
  if (state->values.size() != value_count) {
    return refuse("the state holds " + std::to_string(state->values.size()) + " values where " +
                      std::to_string(value_count) + " belong",
                  remedy);
  }
  for (std::size_t i = 0; i < value_count; ++i) {
    if (!std::isfinite(state->values[i]))
      return refuse("value " + std::to_string(i) + " of the state is not finite", remedy);
  }
  return state;
}

}  // namespace nightweigh::strategies

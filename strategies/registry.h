// The list of rules: the only place that knows all of them. A new rule adds its line in registry.cpp.
#pragma once

#include <memory>
#include <string_view>
#include <vector>

#include "strategies/interface/choice.h"
#include "strategies/interface/strategy.h"

namespace nightweigh::strategies {

// Names of the rules that can be made.
std::vector<std::string_view> rules();

// A strategy that has learned nothing. Refuses an unknown rule and parameters outside their domain.
Outcome<std::unique_ptr<Strategy>> make_strategy(const Choice& choice);

// The strategy that save() was called on. Refuses altered or truncated bytes, another rule, another m,
// other parameters, an unknown format number.
Outcome<std::unique_ptr<Strategy>> load_strategy(const Choice& choice, std::string_view bytes);

}  // namespace nightweigh::strategies

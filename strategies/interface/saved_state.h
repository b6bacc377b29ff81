// What every rule's save() and load share: the header of the state bytes filled from the choice, and its
// check against the choice.
#pragma once

#include <cstdint>
#include <string>
#include <string_view>
#include <vector>

#include "strategies/interface/choice.h"
#include "strategies/interface/state_bytes.h"

namespace nightweigh::strategies {

std::string save_state(const Choice& choice, std::uint32_t format, std::uint64_t days,
                       std::vector<double> values);

// The state in `bytes`, if it is of this choice, of `format`, holds `value_count` finite values.
Outcome<StateBytes> load_state(const Choice& choice, std::uint32_t format, std::size_t value_count,
                               std::string_view bytes);

}  // namespace nightweigh::strategies

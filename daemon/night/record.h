// The night's canonical bytes: JSON with sorted keys, no spaces, decimals as strings, doubles in their
// shortest round-trip form. What the journal hashes, and what a reader gets as the night's evidence.
#pragma once

#include <string>

#include "daemon/night/night.h"

namespace nightweigh::night {

// Never contains batch digests, wall times or waiting: the same closes give the same bytes however and
// whenever they came.
std::string canonical_bytes(const Night& night, const BookSettings& settings);

// The learned day of a recorded night, for a rebuild; nullopt where the bytes are not a night's.
std::optional<HistoryDay> history_day(const std::string& canonical_bytes);

}  // namespace nightweigh::night

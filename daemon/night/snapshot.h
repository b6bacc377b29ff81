// A BookState as bytes, and back.
#pragma once

#include <string>

#include "daemon/domain/result.h"
#include "daemon/night/night.h"

namespace nightweigh::night {

// Raised with each change of what the desk text means.
inline constexpr int desk_format = 1;

struct SnapshotBytes {
  std::string desk;         // JSON
  std::string strategy;     // strategies' state bytes
  std::string covariation;  // covariation's bytes
};

// Precondition: the state has had a night.
SnapshotBytes save_snapshot(const BookState& state, const BookSettings& settings);

struct LoadedState {
  BookState state;
  // Why the learner could not be taken over (other parameters, older format, damage), in words; empty if
  // it was. Such a state asks for its history at the next night.
  std::string rebuild_because;
};
// Refuses a desk text that is not of these settings' instruments, currency or name.
Result<LoadedState> load_snapshot(const SnapshotBytes& bytes, const BookSettings& settings);

}  // namespace nightweigh::night

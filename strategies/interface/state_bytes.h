// The one form in which strategies save themselves:
//
//   8 bytes  magic "NWSTATE\0"
//   u32      format number of the rule's state, little-endian
//   u32      length of the rule name, then its bytes
//   u64      m
//   32 bytes SHA-256 of the rule's parameters as canonical text (the "choice")
//   u64      days learned
//   u64      number of doubles, then the doubles, IEEE 754 little-endian
//   32 bytes SHA-256 of everything before
//
// Reading checks every length against the bytes at hand before it believes it.
#pragma once

#include <cstdint>
#include <string>
#include <string_view>
#include <vector>

#include "strategies/interface/strategy.h"

namespace nightweigh::strategies {

struct StateBytes {
  std::uint32_t format = 1;
  std::string rule;
  std::uint64_t m = 0;
  std::string choice_digest;  // 32 bytes
  std::uint64_t days = 0;
  std::vector<double> values;
};

std::string write_state(const StateBytes& state);

// Refuses bytes that are truncated, altered, or not of this form.
Outcome<StateBytes> read_state(std::string_view bytes);

}  // namespace nightweigh::strategies

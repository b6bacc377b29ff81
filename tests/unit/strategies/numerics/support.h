// What the numerics tests share: fixed data, hashes of bits, every level in turn.
#pragma once

#include <bit>
#include <cstdint>
#include <cstring>
#include <span>
#include <vector>

#include "strategies/numerics/numerics.h"

namespace nightweigh::numerics::testing {

// SplitMix64 (Steele, Lea, Flood 2014), so that the data is the same everywhere. First outputs for seed
// 1234567 are checked in same_bits.cpp.
class Random {
 public:
  explicit Random(std::uint64_t seed) : state_(seed) {}
  std::uint64_t next() {
    std::uint64_t z = (state_ += 0x9e3779b97f4a7c15);
    z = (z ^ (z >> 30)) * 0xbf58476d1ce4e5b9;
    z = (z ^ (z >> 27)) * 0x94d049bb133111eb;
    return z ^ (z >> 31);
  }
  // Multiples of 2^-53 in [0, 1).
  double uniform() { return static_cast<double>(next() >> 11) * 0x1p-53; }
  double between(double low, double high) { return low + (high - low) * uniform(); }

 private:
  std::uint64_t state_;
};

// FNV-1a, 64 bits, over the bytes of the doubles in little-endian order.
inline std::uint64_t hash_of(std::span<const double> values) {
  std::uint64_t hash = 0xcbf29ce484222325;
  for (double value : values) {
    const auto bits = std::bit_cast<std::uint64_t>(value);
    for (int byte = 0; byte < 8; ++byte) {
      hash = (hash ^ ((bits >> (8 * byte)) & 0xff)) * 0x100000001b3;
    }
  }
  return hash;
}

inline bool same_bits(std::span<const double> a, std::span<const double> b) {
  return a.size() == b.size() && (a.empty() || std::memcmp(a.data(), b.data(), a.size_bytes()) == 0);
}

// A vector of doubles whose first element stands `shift` doubles (8 * shift bytes) after a 64-byte line.
class Shifted {
 public:
  Shifted(std::span<const double> values, std::size_t shift) : storage_(values.size() + 16) {
    const auto address = reinterpret_cast<std::uintptr_t>(storage_.data());
    const std::size_t to_line = (64 - address % 64) % 64 / sizeof(double);
    view_ = std::span(storage_).subspan(to_line + shift, values.size());
    for (std::size_t k = 0; k < values.size(); ++k) view_[k] = values[k];
  }
  Shifted(const Shifted&) = delete;
  Shifted& operator=(const Shifted&) = delete;
  std::span<double> view() const { return view_; }

 private:
  std::vector<double> storage_;
  std::span<double> view_;
};

// Puts the level in use back at the end of a test.
class KeepLevel {
 public:
  KeepLevel() : before_(level()) {}
  ~KeepLevel() { force_level(before_); }
  KeepLevel(const KeepLevel&) = delete;
  KeepLevel& operator=(const KeepLevel&) = delete;

 private:
  Level before_;
};

}  // namespace nightweigh::numerics::testing

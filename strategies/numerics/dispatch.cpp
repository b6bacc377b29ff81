// Which level computes.
#include <array>
#include <atomic>

#include "strategies/numerics/kernel_table.h"
#include "strategies/numerics/numerics.h"

namespace nightweigh::numerics {
namespace {

constexpr std::array all_levels = {Level::scalar, Level::sse2, Level::avx2, Level::avx512};

// The table of a level; null where the program was built for another processor or the machine lacks it.
// __builtin_cpu_supports also asks whether the operating system saves the wide registers.
const KernelTable* table_here(Level level) {
#if defined(__x86_64__)
  switch (level) {
    case Level::scalar:
      return &kernels_scalar;
    case Level::sse2:
      return &kernels_sse2;
    case Level::avx2:
      return __builtin_cpu_supports("avx2") ? &kernels_avx2 : nullptr;
    case Level::avx512:
      return __builtin_cpu_supports("avx512f") && __builtin_cpu_supports("avx512dq") ? &kernels_avx512
                                                                                     : nullptr;
  }
  return nullptr;
#else
  return level == Level::scalar ? &kernels_scalar : nullptr;
#endif
}

std::atomic<Level>& chosen() {
  static std::atomic<Level> level = levels_here().back();
  return level;
}

}  // namespace

std::string_view name_of(Level level) {
  switch (level) {
    case Level::scalar:
      return "scalar";
    case Level::sse2:
      return "sse2";
    case Level::avx2:
      return "avx2";
    case Level::avx512:
      return "avx512";
  }
  return "unknown";
}

std::vector<Level> levels_here() {
  std::vector<Level> levels;
  for (Level level : all_levels) {
    if (table_here(level) != nullptr) levels.push_back(level);
  }
  return levels;
}

std::vector<Level> levels_missing() {
  std::vector<Level> levels;
  for (Level level : all_levels) {
    if (table_here(level) == nullptr) levels.push_back(level);
  }
  return levels;
}

Level level() {
  return chosen().load(std::memory_order_relaxed);
}

bool force_level(Level level) {
  if (table_here(level) == nullptr) return false;
  chosen().store(level, std::memory_order_relaxed);
  return true;
}

const KernelTable& kernels() {
  switch (level()) {
#if defined(__x86_64__)
    case Level::sse2:
      return kernels_sse2;
    case Level::avx2:
      return kernels_avx2;
    case Level::avx512:
      return kernels_avx512;
#endif
    default:
      return kernels_scalar;
  }
}

}  // namespace nightweigh::numerics

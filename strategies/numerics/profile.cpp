#include "strategies/numerics/numerics.h"

#if defined(__GLIBC__)
#include <gnu/libc-version.h>
#endif

namespace nightweigh::numerics {

std::string profile() {
#if defined(__x86_64__)
  std::string text = "x86_64";
#elif defined(__aarch64__)
  std::string text = "aarch64";
#else
  std::string text = "other";
#endif
#if defined(__GLIBC__)
  text += std::string(" glibc-") + gnu_get_libc_version();
#else
  text += " libc-unknown";
#endif
#if defined(__clang__)
  text += " clang-" + std::to_string(__clang_major__);
#elif defined(__GNUC__)
  text += " gcc-" + std::to_string(__GNUC__);
#else
  text += " compiler-unknown";
#endif
  return text;
}

}  // namespace nightweigh::numerics

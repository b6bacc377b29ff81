// Sums and elementary functions on the level in use.
#include <bit>
#include <cmath>
#include <cstdint>
#include <limits>
#include <stdexcept>

#include "strategies/numerics/kernel_table.h"
#include "strategies/numerics/numerics.h"

namespace nightweigh::numerics {
namespace {

void require_equal_sizes(std::size_t a, std::size_t b, const char* function) {
  if (a == b) return;
  throw std::logic_error(std::string("numerics::") + function + ": sizes " + std::to_string(a) + " and " +
                         std::to_string(b) + " differ");
}

}  // namespace

double sum(std::span<const double> values) {
  return kernels().sum(values.data(), values.size());
}

double dot(std::span<const double> a, std::span<const double> b) {
  require_equal_sizes(a.size(), b.size(), "dot");
  return kernels().dot(a.data(), b.data(), a.size());
}

double log(double x) {
  double result = 0;
  kernels().log(&x, &result, 1);
  return result;
}

double exp(double x) {
  double result = 0;
  kernels().exp(&x, &result, 1);
  return result;
}

void log(std::span<const double> in, std::span<double> out) {
  require_equal_sizes(in.size(), out.size(), "log");
  kernels().log(in.data(), out.data(), in.size());
}

void exp(std::span<const double> in, std::span<double> out) {
  require_equal_sizes(in.size(), out.size(), "exp");
  kernels().exp(in.data(), out.data(), in.size());
}

// |x| = 8^e m with m in [1/2, 4). t, the root of m to 23 bits, has an exact square; Halley's step
// t + t (m/t^2 - t) / (m/t^2 + 2t) then leaves the rounding of m/t^2 (a third of it counts) and the last.
double cbrt(double x) {
  if (std::isnan(x)) return std::numeric_limits<double>::quiet_NaN();
  if (x == 0 || std::isinf(x)) return x;
  int exponent = 0;
  double m = std::frexp(std::fabs(x), &exponent);  // exact, [1/2, 1)
  const int above = ((exponent % 3) + 3) % 3;
  m = std::ldexp(m, above);
  const double root = exp(log(m) / 3);
  const double t =
      std::bit_cast<double>(std::bit_cast<std::uint64_t>(root) & ~((std::uint64_t{1} << 30) - 1));
  const double quotient = m / (t * t);
  const double better = t + t * ((quotient - t) / (quotient + (t + t)));
  return std::copysign(std::ldexp(better, (exponent - above) / 3), x);
}

}  // namespace nightweigh::numerics

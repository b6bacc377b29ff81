// The kernels of one level. CMake compiles this file once for each level, with NIGHTWEIGH_LEVEL set to its
// name and the compiler flags of its instruction set. The arithmetic is written once, on vectors of
// `width` doubles; only the width differs, and no result depends on it (rules N1 to N4 of numerics.h).
//
// No fused multiply-add: the build sets -ffp-contract=off, and nothing here asks for one.
#include "strategies/numerics/kernel_table.h"

#include <cstdint>

#ifdef __FAST_MATH__
#error "the same bits need IEC 60559 arithmetic: build without -ffast-math"
#endif
#ifndef NIGHTWEIGH_LEVEL
#error "NIGHTWEIGH_LEVEL names the level: scalar, sse2, avx2 or avx512"
#endif

#define NIGHTWEIGH_JOIN_TOKENS(a, b) a##b
#define NIGHTWEIGH_JOIN(a, b) NIGHTWEIGH_JOIN_TOKENS(a, b)
#define NIGHTWEIGH_WIDTH_scalar 1
#define NIGHTWEIGH_WIDTH_sse2 2
#define NIGHTWEIGH_WIDTH_avx2 4
#define NIGHTWEIGH_WIDTH_avx512 8
#define NIGHTWEIGH_WIDTH NIGHTWEIGH_JOIN(NIGHTWEIGH_WIDTH_, NIGHTWEIGH_LEVEL)
#define NIGHTWEIGH_INLINE inline __attribute__((always_inline))

namespace nightweigh::numerics {
namespace {

constexpr std::size_t width = NIGHTWEIGH_WIDTH;
constexpr std::size_t parts = lanes / width;              // vectors in one row of 8 lanes
constexpr std::size_t tile_vectors = tile_nodes / width;  // vectors in one tile row
constexpr std::size_t tile_steps = tile_nodes / lanes;    // rows of 8 lanes in one tile row
constexpr std::size_t block_tiles = 32;                   // tiles in a block of 512 nodes
constexpr std::size_t block_length = block_tiles * tile_nodes;
constexpr std::size_t block_steps = block_length / lanes;

// ---- vectors of `width` doubles

#if NIGHTWEIGH_WIDTH == 1
using Real = double;
using Bits = std::uint64_t;
NIGHTWEIGH_INLINE Real broadcast(double x) {
  return x;
}
NIGHTWEIGH_INLINE Bits broadcast_bits(std::uint64_t x) {
  return x;
}
NIGHTWEIGH_INLINE Bits mask(bool holds) {
  return holds ? ~std::uint64_t{0} : 0;
}
NIGHTWEIGH_INLINE bool all_hold(Bits masks) {
  return masks != 0;
}
#else
typedef double Real __attribute__((vector_size(width * sizeof(double))));
typedef std::uint64_t Bits __attribute__((vector_size(width * sizeof(double))));
#if NIGHTWEIGH_WIDTH == 2
NIGHTWEIGH_INLINE Real broadcast(double x) {
  return Real{x, x};
}
NIGHTWEIGH_INLINE Bits broadcast_bits(std::uint64_t x) {
  return Bits{x, x};
}
#elif NIGHTWEIGH_WIDTH == 4
NIGHTWEIGH_INLINE Real broadcast(double x) {
  return Real{x, x, x, x};
}
NIGHTWEIGH_INLINE Bits broadcast_bits(std::uint64_t x) {
  return Bits{x, x, x, x};
}
#else
NIGHTWEIGH_INLINE Real broadcast(double x) {
  return Real{x, x, x, x, x, x, x, x};
}
NIGHTWEIGH_INLINE Bits broadcast_bits(std::uint64_t x) {
  return Bits{x, x, x, x, x, x, x, x};
}
#endif
// A comparison of vectors is already all ones or all zeros in each lane.
template <typename Comparison>
NIGHTWEIGH_INLINE Bits mask(Comparison holds) {
  return (Bits)holds;
}
NIGHTWEIGH_INLINE bool all_hold(Bits masks) {
  std::uint64_t all = masks[0];
#pragma GCC unroll 8
  for (std::size_t v = 1; v < width; ++v) all &= masks[v];
  return all != 0;
}
#endif

NIGHTWEIGH_INLINE Real load(const double* from) {
  Real v;
  __builtin_memcpy(&v, from, sizeof v);
  return v;
}
NIGHTWEIGH_INLINE Real load_aligned(const double* from) {
  Real v;
  __builtin_memcpy(&v, __builtin_assume_aligned(from, sizeof v), sizeof v);
  return v;
}
NIGHTWEIGH_INLINE void store(double* to, Real v) {
  __builtin_memcpy(to, &v, sizeof v);
}
NIGHTWEIGH_INLINE void store_aligned(double* to, Real v) {
  __builtin_memcpy(__builtin_assume_aligned(to, sizeof v), &v, sizeof v);
}
NIGHTWEIGH_INLINE Bits as_bits(Real x) {
  Bits b;
  __builtin_memcpy(&b, &x, sizeof b);
  return b;
}
NIGHTWEIGH_INLINE Real as_real(Bits b) {
  Real x;
  __builtin_memcpy(&x, &b, sizeof x);
  return x;
}
NIGHTWEIGH_INLINE Real select(Bits where, Real then, Real otherwise) {
  return as_real((where & as_bits(then)) | (~where & as_bits(otherwise)));
}

// ---- reductions (N2)

NIGHTWEIGH_INLINE double fold(const double* lane) {
  return ((lane[0] + lane[4]) + (lane[2] + lane[6])) + ((lane[1] + lane[5]) + (lane[3] + lane[7]));
}

// Sum over term(values of 8 consecutive elements, starting at p) for one block; `count` <= 512. A short
// last row is filled with zeros, which change nothing: a lane starts at +0, is never -0, and adding +0 or
// -0 to it leaves it as it is.
double sum_block(const double* values, std::size_t count) {
  Real total[parts];
  for (std::size_t p = 0; p < parts; ++p) total[p] = broadcast(0.0);
  std::size_t k = 0;
  for (; k + lanes <= count; k += lanes) {
#pragma GCC unroll 8
    for (std::size_t p = 0; p < parts; ++p) total[p] = total[p] + load(values + k + p * width);
  }
  alignas(tile_alignment_bytes) double lane[lanes];
#pragma GCC unroll 8
  for (std::size_t p = 0; p < parts; ++p) store_aligned(lane + p * width, total[p]);
  for (std::size_t rest = 0; k + rest < count; ++rest) lane[rest] = lane[rest] + values[k + rest];
  return fold(lane);
}

double dot_block(const double* a, const double* b, std::size_t count) {
  Real total[parts];
  for (std::size_t p = 0; p < parts; ++p) total[p] = broadcast(0.0);
  std::size_t k = 0;
  for (; k + lanes <= count; k += lanes) {
#pragma GCC unroll 8
    for (std::size_t p = 0; p < parts; ++p) {
      total[p] = total[p] + load(a + k + p * width) * load(b + k + p * width);
    }
  }
  alignas(tile_alignment_bytes) double lane[lanes];
#pragma GCC unroll 8
  for (std::size_t p = 0; p < parts; ++p) store_aligned(lane + p * width, total[p]);
  for (std::size_t rest = 0; k + rest < count; ++rest) lane[rest] = lane[rest] + a[k + rest] * b[k + rest];
  return fold(lane);
}

NIGHTWEIGH_INLINE std::size_t least(std::size_t a, std::size_t b) {
  return a < b ? a : b;
}

double sum_all(const double* values, std::size_t count) {
  double total = 0;
  for (std::size_t k = 0; k < count; k += block_length) {
    total = total + sum_block(values + k, least(block_length, count - k));
  }
  return total;
}

double dot_all(const double* a, const double* b, std::size_t count) {
  double total = 0;
  for (std::size_t k = 0; k < count; k += block_length) {
    total = total + dot_block(a + k, b + k, least(block_length, count - k));
  }
  return total;
}

// ---- logarithm and exponential
//
// ln 2 in two parts: the first has 40 bits, so that its product with any exponent is exact.
constexpr double ln2_high = 0x1.62e42fefa4000p-1;
constexpr double ln2_low = -0x1.8432a1b0e2634p-43;
constexpr double one_over_ln2 = 0x1.71547652b82fep+0;
constexpr std::uint64_t one_bits = 0x3ff0000000000000;
constexpr std::uint64_t sqrt_half_bits = 0x3fe6a09e667f3bcd;
constexpr std::uint64_t mantissa_mask = 0x000fffffffffffff;
constexpr std::uint64_t two_52_bits = 0x4330000000000000;
constexpr double two_52 = 0x1p52;
constexpr double infinity = __builtin_inf();
constexpr double not_a_number = __builtin_nan("");

// x = 2^k m, m in [sqrt(1/2), sqrt(2)), f = m - 1 (exact), s = f / (2 + f). From
//   ln(1 + f) = 2 artanh(s) = 2 s + s P(s^2),  P(z) = sum_{n>=1} 2 z^n / (2n + 1)   (the series of artanh)
// and 2 s = f - s f, s f = f^2/2 - s f^2/2 follows ln(1 + f) = f - f^2/2 + s (f^2/2 + P(s^2)).
// |s| <= 0.1716: eleven terms leave less than 2^-60 of the result. f^2/2 is taken in two parts (the upper 26
// bits of f squared are exact), and k ln2 + f - f^2/2 is summed with its rounding errors, so that little
// more than the last rounding is left, near 1 too, where the result is as small as f.
NIGHTWEIGH_INLINE Real log_vector(Real x) {
  const Bits subnormal = mask(x < broadcast(0x1p-1022));  // or negative or zero: settled below
  const Real normal = select(subnormal, x * broadcast(0x1p54), x);
  const Bits shifted = as_bits(normal) + broadcast_bits(one_bits - sqrt_half_bits);
  // The biased exponent becomes a number by standing in the low bits of 2^52 + exponent.
  const Real k = (as_real((shifted >> 52) | broadcast_bits(two_52_bits)) - broadcast(two_52 + 1023)) -
                 select(subnormal, broadcast(54), broadcast(0));
  const Real m = as_real((shifted & broadcast_bits(mantissa_mask)) + broadcast_bits(sqrt_half_bits));
  const Real f = m - broadcast(1.0);
  const Real s = f / (f + broadcast(2.0));
  const Real z = s * s;
  const Real zz = z * z;
  Real odd = broadcast(2.0 / 23) * zz + broadcast(2.0 / 19);
  Real even = broadcast(2.0 / 21) * zz + broadcast(2.0 / 17);
  odd = odd * zz + broadcast(2.0 / 15);
  even = even * zz + broadcast(2.0 / 13);
  odd = odd * zz + broadcast(2.0 / 11);
  even = even * zz + broadcast(2.0 / 9);
  odd = odd * zz + broadcast(2.0 / 7);
  even = even * zz + broadcast(2.0 / 5);
  odd = odd * zz + broadcast(2.0 / 3);
  const Real series = odd * z + even * zz;

  const Real f_high = as_real(as_bits(f) & broadcast_bits(~((std::uint64_t{1} << 27) - 1)));
  const Real f_low = f - f_high;
  const Real half_square_high = broadcast(0.5) * f_high * f_high;
  const Real half_square_low = broadcast(0.5) * f_low * (f + f_high);
  const Real whole = k * broadcast(ln2_high);
  const Real first = whole + f;
  const Real first_error = f - (first - whole);
  const Real high = first - half_square_high;
  const Real high_error = (first - high) - half_square_high;
  const Real low = s * ((half_square_high + half_square_low) + series) +
                   (k * broadcast(ln2_low) + ((first_error + high_error) - half_square_low));
  Real result = high + low;

  result = select(mask(x == broadcast(infinity)), x, result);
  result = select(mask(x == broadcast(0.0)), broadcast(-infinity), result);
  // Negative or not a number: one quiet NaN, the same on every level.
  return select(mask(x >= broadcast(0.0)), result, broadcast(not_a_number));
}

// n = x / ln 2 to the nearest whole number, r = x - n ln 2 in two parts, exp(x) = 2^n exp(r) with the Taylor
// series to degree 13: |r| <= 0.3466, the rest is below 2^-57. 1 + r is summed with its rounding error.
// 2^n is applied in two factors, so that results overflow and underflow gradually, with one rounding.
NIGHTWEIGH_INLINE Real exp_vector(Real x) {
  // Beyond these the result is infinite or zero, and stays so at the bound itself. NaN passes.
  Real bounded = select(mask(x > broadcast(710.0)), broadcast(710.0), x);
  bounded = select(mask(bounded < broadcast(-746.0)), broadcast(-746.0), bounded);
  // Adding 1.5 * 2^52 leaves the nearest whole number in the low bits.
  const Real shift = broadcast(0x1.8p52);
  const Real n = (bounded * broadcast(one_over_ln2) + shift) - shift;
  const Real reduced = bounded - n * broadcast(ln2_high);  // exact
  const Real correction = n * broadcast(ln2_low);
  const Real r = reduced - correction;
  const Real r_low = (reduced - r) - correction;
  const Real rr = r * r;
  // sum_{j=0}^{11} r^j / (j+2)!
  Real odd = broadcast(1.0 / 6227020800) * rr + broadcast(1.0 / 39916800);
  Real even = broadcast(1.0 / 479001600) * rr + broadcast(1.0 / 3628800);
  odd = odd * rr + broadcast(1.0 / 362880);
  even = even * rr + broadcast(1.0 / 40320);
  odd = odd * rr + broadcast(1.0 / 5040);
  even = even * rr + broadcast(1.0 / 720);
  odd = odd * rr + broadcast(1.0 / 120);
  even = even * rr + broadcast(1.0 / 24);
  odd = odd * rr + broadcast(1.0 / 6);
  even = even * rr + broadcast(1.0 / 2);
  const Real tail = rr * (odd * r + even);
  const Real first = broadcast(1.0) + r;
  const Real first_error = r - (first - broadcast(1.0));
  // exp(r + r_low) = exp(r) + r_low exp(r); exp(r) = `first` is near enough there.
  const Real y = first + (tail + (first_error + r_low * first));

  const Real n_first = (n * broadcast(0.5) + shift) - shift;
  const Real n_second = n - n_first;
  const Real factor_first = as_real((as_bits(n_first + shift) + broadcast_bits(1023)) << 52);
  const Real factor_second = as_real((as_bits(n_second + shift) + broadcast_bits(1023)) << 52);
  const Real result = (y * factor_first) * factor_second;
  return select(mask(x == x), result, broadcast(not_a_number));
}

template <Real (*function)(Real)>
NIGHTWEIGH_INLINE void map(const double* in, double* out, std::size_t count) {
  std::size_t k = 0;
  for (; k + width <= count; k += width) store(out + k, function(load(in + k)));
  if (k < count) {
    alignas(tile_alignment_bytes) double rest[width];
    for (std::size_t j = 0; j < width; ++j) rest[j] = k + j < count ? in[k + j] : 1.0;
    store_aligned(rest, function(load_aligned(rest)));
    for (std::size_t j = 0; k + j < count; ++j) out[k + j] = rest[j];
  }
}

void log_all(const double* in, double* out, std::size_t count) {
  map<log_vector>(in, out, count);
}
void exp_all(const double* in, double* out, std::size_t count) {
  map<exp_vector>(in, out, count);
}

// ---- forward products (N3)

// `vectors` vectors of nodes from one tile times `days` days, all accumulators in registers.
template <std::size_t vectors, std::size_t days>
NIGHTWEIGH_INLINE void forward_part(const double* tile, std::size_t instruments, const double* x, double* y,
                                    std::size_t stride) {
  Real total[days][vectors];
#pragma GCC unroll 32
  for (std::size_t t = 0; t < days; ++t) {
#pragma GCC unroll 32
    for (std::size_t v = 0; v < vectors; ++v) total[t][v] = broadcast(0.0);
  }
  for (std::size_t i = 0; i < instruments; ++i) {
    const double* row = tile + i * tile_nodes;
    Real b[vectors];
#pragma GCC unroll 32
    for (std::size_t v = 0; v < vectors; ++v) b[v] = load_aligned(row + v * width);
#pragma GCC unroll 32
    for (std::size_t t = 0; t < days; ++t) {
      const Real xt = broadcast(x[t * instruments + i]);
#pragma GCC unroll 32
      for (std::size_t v = 0; v < vectors; ++v) total[t][v] = total[t][v] + b[v] * xt;
    }
  }
#pragma GCC unroll 32
  for (std::size_t t = 0; t < days; ++t) {
#pragma GCC unroll 32
    for (std::size_t v = 0; v < vectors; ++v) store(y + t * stride + v * width, total[t][v]);
  }
}

// Vectors of nodes at once for a number of days: about as many accumulators as the registers hold.
constexpr std::size_t days_at_once = 6;
constexpr std::size_t vectors_at_once(std::size_t days) {
  const std::size_t most = days == 1 ? 8 : days <= 3 ? 4 : 2;
  return most < tile_vectors ? most : tile_vectors;
}

template <std::size_t days>
void forward_tile(const double* tile, std::size_t instruments, const double* x, double* y,
                  std::size_t stride) {
  constexpr std::size_t at_once = vectors_at_once(days);
  static_assert(tile_vectors % at_once == 0);
  for (std::size_t v = 0; v < tile_vectors; v += at_once) {
    forward_part<at_once, days>(tile + v * width, instruments, x, y + v * width, stride);
  }
}

// All days of one tile, in groups of six; y points at the tile's first node of the first day.
void forward_days(const double* tile, std::size_t instruments, const double* x, std::size_t days, double* y,
                  std::size_t stride) {
  std::size_t t = 0;
  for (; t + days_at_once <= days; t += days_at_once) {
    forward_tile<days_at_once>(tile, instruments, x + t * instruments, y + t * stride, stride);
  }
  x += t * instruments;
  y += t * stride;
  switch (days - t) {
    case 1:
      return forward_tile<1>(tile, instruments, x, y, stride);
    case 2:
      return forward_tile<2>(tile, instruments, x, y, stride);
    case 3:
      return forward_tile<3>(tile, instruments, x, y, stride);
    case 4:
      return forward_tile<4>(tile, instruments, x, y, stride);
    case 5:
      return forward_tile<5>(tile, instruments, x, y, stride);
    default:
      return;
  }
}

void forward_all(TileView tiles, const double* x, std::size_t days, DayRows y) {
  for (std::size_t tile = tiles.first_block * block_tiles; tile < tiles.last_block * block_tiles; ++tile) {
    forward_days(tiles.values + tile * tile_nodes * tiles.instruments, tiles.instruments, x, days,
                 y.values + tile * tile_nodes, y.stride);
  }
}

// ---- backward products (N2)

// One tile of one day: lane sums of every instrument (8 doubles each, aligned) carried on.
NIGHTWEIGH_INLINE void backward_tile(const double* tile, std::size_t instruments, const double* s,
                                     double* lane_sums) {
  Real weight[tile_vectors];
#pragma GCC unroll 32
  for (std::size_t v = 0; v < tile_vectors; ++v) weight[v] = load(s + v * width);
  for (std::size_t i = 0; i < instruments; ++i) {
    const double* row = tile + i * tile_nodes;
    Real total[parts];
#pragma GCC unroll 8
    for (std::size_t p = 0; p < parts; ++p) total[p] = load_aligned(lane_sums + i * lanes + p * width);
#pragma GCC unroll 4
    for (std::size_t step = 0; step < tile_steps; ++step) {
#pragma GCC unroll 8
      for (std::size_t p = 0; p < parts; ++p) {
        total[p] = total[p] + load_aligned(row + step * lanes + p * width) * weight[step * parts + p];
      }
    }
#pragma GCC unroll 8
    for (std::size_t p = 0; p < parts; ++p) store_aligned(lane_sums + i * lanes + p * width, total[p]);
  }
}

void clear(double* values, std::size_t count) {
  for (std::size_t k = 0; k < count; ++k) values[k] = 0.0;
}

void fold_all(const double* lane_sums, std::size_t instruments, double* partial) {
  for (std::size_t i = 0; i < instruments; ++i) partial[i] = fold(lane_sums + i * lanes);
}

// `count` instruments times `days` days over one block, all accumulators in registers, one part of the 8
// lanes after the other. packed: the block's node weights as [part][step][day][width].
template <std::size_t count, std::size_t days>
NIGHTWEIGH_INLINE void backward_part(const double* block, std::size_t instruments, const double* packed,
                                     double* partial) {
  alignas(tile_alignment_bytes) double lane[count][days][lanes];
  for (std::size_t p = 0; p < parts; ++p) {
    Real total[count][days];
#pragma GCC unroll 32
    for (std::size_t i = 0; i < count; ++i) {
#pragma GCC unroll 32
      for (std::size_t t = 0; t < days; ++t) total[i][t] = broadcast(0.0);
    }
    const double* s = packed + p * block_steps * days * width;
    for (std::size_t tile = 0; tile < block_tiles; ++tile) {
      const double* rows = block + tile * tile_nodes * instruments + p * width;
#pragma GCC unroll 4
      for (std::size_t step = 0; step < tile_steps; ++step) {
        Real b[count];
#pragma GCC unroll 32
        for (std::size_t i = 0; i < count; ++i) b[i] = load_aligned(rows + i * tile_nodes + step * lanes);
#pragma GCC unroll 32
        for (std::size_t t = 0; t < days; ++t) {
          const Real st = load_aligned(s + t * width);
#pragma GCC unroll 32
          for (std::size_t i = 0; i < count; ++i) total[i][t] = total[i][t] + b[i] * st;
        }
        s += days * width;
      }
    }
#pragma GCC unroll 32
    for (std::size_t i = 0; i < count; ++i) {
#pragma GCC unroll 32
      for (std::size_t t = 0; t < days; ++t) store_aligned(&lane[i][t][p * width], total[i][t]);
    }
  }
  for (std::size_t t = 0; t < days; ++t) {
    for (std::size_t i = 0; i < count; ++i) partial[t * instruments + i] = fold(lane[i][t]);
  }
}

// At most six days of one block; s points at the block's first node of the first day.
template <std::size_t days>
void backward_group(const double* block, std::size_t instruments, const double* s, std::size_t stride,
                    double* partial) {
  alignas(tile_alignment_bytes) double packed[block_length * days];
  double* to = packed;
  for (std::size_t p = 0; p < parts; ++p) {
    for (std::size_t step = 0; step < block_steps; ++step) {
      for (std::size_t t = 0; t < days; ++t, to += width) {
        store_aligned(to, load(s + t * stride + step * lanes + p * width));
      }
    }
  }
  constexpr std::size_t at_once = width == 8 ? 4 : 2;
  std::size_t i = 0;
  for (; i + at_once <= instruments; i += at_once) {
    backward_part<at_once, days>(block + i * tile_nodes, instruments, packed, partial + i);
  }
  for (; i < instruments; ++i) {
    backward_part<1, days>(block + i * tile_nodes, instruments, packed, partial + i);
  }
}

// All days of one block, in groups of six; partial: [day][instrument].
void backward_days(const double* block, std::size_t instruments, const double* s, std::size_t stride,
                   std::size_t days, double* partial, double* lane_sums) {
  std::size_t t = 0;
  for (; t + days_at_once <= days; t += days_at_once) {
    backward_group<days_at_once>(block, instruments, s + t * stride, stride, partial + t * instruments);
  }
  s += t * stride;
  partial += t * instruments;
  switch (days - t) {
    case 1:
      clear(lane_sums, instruments * lanes);
      for (std::size_t tile = 0; tile < block_tiles; ++tile) {
        backward_tile(block + tile * tile_nodes * instruments, instruments, s + tile * tile_nodes, lane_sums);
      }
      return fold_all(lane_sums, instruments, partial);
    case 2:
      return backward_group<2>(block, instruments, s, stride, partial);
    case 3:
      return backward_group<3>(block, instruments, s, stride, partial);
    case 4:
      return backward_group<4>(block, instruments, s, stride, partial);
    case 5:
      return backward_group<5>(block, instruments, s, stride, partial);
    default:
      return;
  }
}

void backward_all(TileView tiles, ConstDayRows s, std::size_t days, double* partial, double* scratch) {
  for (std::size_t block = tiles.first_block; block < tiles.last_block; ++block) {
    backward_days(tiles.values + block * block_length * tiles.instruments, tiles.instruments,
                  s.values + block * block_length, s.stride, days, partial + block * days * tiles.instruments,
                  scratch);
  }
}

// ---- node wealth

// wealth * 2^(256 steps) stays the node's wealth. A value leaves the range [2^-256, 2^256] by one step at
// most, a relative being within it. Zero stays zero, and has no step to take.
NIGHTWEIGH_INLINE Real advance_vector(Real y, Real& wealth, Real& steps, Real common_step) {
  const Real zero = broadcast(0.0);
  Real s = wealth * y;
  const Bits above = mask(s > broadcast(0x1p256));
  const Bits below = mask(s < broadcast(0x1p-256)) & mask(s > zero);
  s = select(above, s * broadcast(0x1p-256), select(below, s * broadcast(0x1p256), s));
  steps = (steps + select(above, broadcast(1.0), zero)) - select(below, broadcast(1.0), zero);
  wealth = s;
  const Real ahead = steps - common_step;
  Real factor = select(mask(ahead > broadcast(2.0)), broadcast(infinity), zero);
  factor = select(mask(ahead == broadcast(2.0)), broadcast(0x1p512), factor);
  factor = select(mask(ahead == broadcast(1.0)), broadcast(0x1p256), factor);
  factor = select(mask(ahead == zero), broadcast(1.0), factor);
  factor = select(mask(ahead == broadcast(-1.0)), broadcast(0x1p-256), factor);
  factor = select(mask(ahead == broadcast(-2.0)), broadcast(0x1p-512), factor);
  return select(mask(s == zero), zero, s * factor);
}

NIGHTWEIGH_INLINE void advance_part(const double* y, double* wealth, double* steps, Real common_step,
                                    double* s) {
  Real node_wealth = load(wealth);
  Real node_steps = load(steps);
  const Real node_y = load(y);
  // Nearly always every node stays in range and at the common step; the general form would give the same.
  const Real plain = node_wealth * node_y;
  if (all_hold(mask(plain >= broadcast(0x1p-256)) & mask(plain <= broadcast(0x1p256)) &
               mask(node_steps == common_step))) {
    store(wealth, plain);
    store(s, plain);
    return;
  }
  store(s, advance_vector(node_y, node_wealth, node_steps, common_step));
  store(wealth, node_wealth);
  store(steps, node_steps);
}

void advance_all(const double* y, double* wealth, double* steps, double common_step, double* s,
                 std::size_t first_node, std::size_t last_node) {
  for (std::size_t k = first_node; k < last_node; k += width) {
    advance_part(y + k, wealth + k, steps + k, broadcast(common_step), s + k);
  }
}

// ---- the night pass

// Nodes that the pass of one day has in hand: four vectors, and whole rows of 8 lanes in one tile.
constexpr std::size_t strip_vectors = width == 1 ? 8 : width == 8 ? 2 : 4;
constexpr std::size_t strip_nodes = strip_vectors * width;
constexpr std::size_t strip_steps = strip_nodes / lanes;
static_assert(strip_nodes % lanes == 0 && tile_nodes % strip_nodes == 0);

// y of the strip `next`, and the weights s of the strip `now` into the lane sums, in one loop: while the one
// comes from memory, the other is still in the nearest cache and keeps the arithmetic busy.
NIGHTWEIGH_INLINE void night_strip(const double* now, const double* next, std::size_t instruments,
                                   const double* x, const double* s, double* y, double* lane_sums) {
  Real weight[strip_vectors];
  Real total[strip_vectors];
#pragma GCC unroll 8
  for (std::size_t v = 0; v < strip_vectors; ++v) {
    weight[v] = load_aligned(s + v * width);
    total[v] = broadcast(0.0);
  }
  for (std::size_t i = 0; i < instruments; ++i) {
    const double* next_row = next + i * tile_nodes;
    const double* row = now + i * tile_nodes;
    const Real xi = broadcast(x[i]);
    __builtin_prefetch(next_row + prefetch_rows * tile_nodes);
    __builtin_prefetch(next_row + prefetch_rows * tile_nodes + lanes);
#pragma GCC unroll 8
    for (std::size_t v = 0; v < strip_vectors; ++v) {
      total[v] = total[v] + load_aligned(next_row + v * width) * xi;
    }
    Real lane[parts];
#pragma GCC unroll 8
    for (std::size_t p = 0; p < parts; ++p) lane[p] = load_aligned(lane_sums + i * lanes + p * width);
#pragma GCC unroll 8
    for (std::size_t step = 0; step < strip_steps; ++step) {
#pragma GCC unroll 8
      for (std::size_t p = 0; p < parts; ++p) {
        lane[p] = lane[p] + load_aligned(row + step * lanes + p * width) * weight[step * parts + p];
      }
    }
#pragma GCC unroll 8
    for (std::size_t p = 0; p < parts; ++p) store_aligned(lane_sums + i * lanes + p * width, lane[p]);
  }
#pragma GCC unroll 8
  for (std::size_t v = 0; v < strip_vectors; ++v) store_aligned(y + v * width, total[v]);
}

// One day: every strip is read from memory once.
void night_one_day(TileView tiles, const double* x, double* wealth, double* steps, double common_step,
                   double* partial, double* lane_sums) {
  const std::size_t instruments = tiles.instruments;
  const std::size_t first = tiles.first_block * block_length;
  const std::size_t end = tiles.last_block * block_length;
  if (first == end) return;
  const auto strip_at = [&](std::size_t node) {
    return tiles.values + node / tile_nodes * tile_nodes * instruments + node % tile_nodes;
  };
  alignas(tile_alignment_bytes) double y[strip_nodes];
  alignas(tile_alignment_bytes) double s[strip_nodes];
  forward_part<strip_vectors, 1>(strip_at(first), instruments, x, y, strip_nodes);
  for (std::size_t node = first; node < end; node += strip_nodes) {
    if (node % block_length == 0) clear(lane_sums, instruments * lanes);
    for (std::size_t k = 0; k < strip_nodes; k += width) {
      advance_part(y + k, wealth + node + k, steps + node + k, broadcast(common_step), s + k);
    }
    const std::size_t next = node + strip_nodes;
    // After the last strip there is none: its own y once more, which nobody reads.
    night_strip(strip_at(node), strip_at(next < end ? next : node), instruments, x, s, y, lane_sums);
    if (next % block_length == 0) {
      fold_all(lane_sums, instruments, partial + node / block_length * instruments);
    }
  }
}

// Several days: twelve at a time while the block is in cache.
void night_all(TileView tiles, const double* x, std::size_t days, double* wealth, double* steps,
               double common_step, double* partial, double* scratch) {
  if (days == 1) return night_one_day(tiles, x, wealth, steps, common_step, partial, scratch);
  constexpr std::size_t chunk_days = 2 * days_at_once;
  alignas(tile_alignment_bytes) double s[chunk_days * block_length];
  const std::size_t instruments = tiles.instruments;
  for (std::size_t block = tiles.first_block; block < tiles.last_block; ++block) {
    const double* values = tiles.values + block * block_length * instruments;
    const std::size_t node = block * block_length;
    for (std::size_t t = 0; t < days; t += chunk_days) {
      const std::size_t count = least(chunk_days, days - t);
      for (std::size_t tile = 0; tile < block_tiles; ++tile) {
        forward_days(values + tile * tile_nodes * instruments, instruments, x + t * instruments, count,
                     s + tile * tile_nodes, block_length);
      }
      for (std::size_t day = 0; day < count; ++day) {
        double* row = s + day * block_length;
        for (std::size_t k = 0; k < block_length; k += width) {
          advance_part(row + k, wealth + node + k, steps + node + k, broadcast(common_step), row + k);
        }
      }
      backward_days(values, instruments, s, block_length, count, partial + (block * days + t) * instruments,
                    scratch);
    }
  }
}

}  // namespace

extern const KernelTable NIGHTWEIGH_JOIN(kernels_, NIGHTWEIGH_LEVEL);
const KernelTable NIGHTWEIGH_JOIN(kernels_, NIGHTWEIGH_LEVEL) = {
    sum_all, dot_all, log_all, exp_all, forward_all, backward_all, advance_all, night_all,
};

}  // namespace nightweigh::numerics

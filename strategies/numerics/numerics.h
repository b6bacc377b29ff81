// The arithmetic that reaches state or a decision: sums, products, logarithms and exponentials whose
// bits are the same on every instruction set, for every alignment and for any number of threads.
//
// Rules that make it so (each kernel keeps all of them):
//   N1  multiply, then add; never fused;
//   N2  reductions run over 8 virtual lanes (element k goes to lane k mod 8), in blocks of 512, lanes
//       folded by the tree ((0+4)+(2+6))+((1+5)+(3+7)), blocks added in order;
//   N3  forward products have one accumulator a node, instruments ascending;
//   N4  threads own whole blocks.
//
// One source (kernels.cc) is compiled for each level; the highest one that the machine has is chosen at
// first use and can be forced.
#pragma once

#include <cstddef>
#include <span>
#include <string>
#include <string_view>
#include <vector>

namespace nightweigh::numerics {

// Raised by one whenever any result may differ in its last bit from an earlier version's.
inline constexpr int numerics_version = 1;

// What besides numerics_version may decide the last bit: processor class, C library, compiler. Nights
// record it; verification compares bits only where both are equal. E.g. "x86_64 glibc-2.36 gcc-12".
std::string profile();

enum class Level { scalar, sse2, avx2, avx512 };
std::string_view name_of(Level level);
std::vector<Level> levels_here();      // those that this machine can run, ascending
std::vector<Level> levels_missing();   // those compiled in, or known, that it cannot
Level level();                          // the one in use
bool force_level(Level level);          // false where the machine lacks it; not while others compute

inline constexpr std::size_t block_nodes = 512;

// Sum of values, by N2. Empty: 0.
double sum(std::span<const double> values);
// Sum of a[k]*b[k], by N1 and N2. Sizes equal.
double dot(std::span<const double> a, std::span<const double> b);

// Natural logarithm and exponential: error below 1 unit in the last place over the whole domain, all
// special values as IEC 60559 (log(0) = -inf, log(<0) = NaN, exp overflows to inf, underflows gradually).
double log(double x);
double exp(double x);
// out[k] = log(in[k]); sizes equal; in and out may be the same memory.
void log(std::span<const double> in, std::span<double> out);
void exp(std::span<const double> in, std::span<double> out);
// Real cube root, error below 1 unit in the last place for normal x.
double cbrt(double x);

}  // namespace nightweigh::numerics

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
// first use and can be forced. Products over node matrices stand in node_tiles.h.
//
// Sizes that do not agree are the caller's bug: std::logic_error, in every build, before anything is
// written. Rounding must be to nearest (the default); nothing here sets or asks for another.
#pragma once

#include <cstddef>
#include <span>
#include <string>
#include <string_view>
#include <vector>

namespace nightweigh::numerics {

// Raised by one whenever any result may differ in its last bit from an earlier version's. A test holds
// the hashes of fixed results beside this number.
inline constexpr int numerics_version = 1;

// What besides numerics_version may decide the last bit: processor class, C library, compiler. Nights
// record it; verification compares bits only where both are equal. E.g. "x86_64 glibc-2.36 gcc-12".
// The level in use is no part of it: levels agree in every bit.
std::string profile();

// Instruction sets: plain C++, and those of x86-64 in ascending order.
enum class Level { scalar, sse2, avx2, avx512 };
std::string_view name_of(Level level);  // "scalar", "sse2", "avx2", "avx512"
// Those that this program has and this machine (with its operating system) can run, ascending; scalar is
// always among them.
std::vector<Level> levels_here();
std::vector<Level> levels_missing();  // all others, ascending
// The level in use: the highest of levels_here() unless another was forced. Thread-safe.
Level level();
// Uses this level from now on, for tests and for finding out whether a level is to blame. False, and
// nothing changed, where it is not among levels_here(). A computation running meanwhile may change level
// halfway, which changes no bit of its result.
bool force_level(Level level);

// Nodes, or elements of a reduction, in one block (N2).
inline constexpr std::size_t block_nodes = 512;

// Sum of values, by N2. Empty: 0. Never -0. O(n), no allocation; any alignment.
double sum(std::span<const double> values);
// Sum of a[k]*b[k], by N1 and N2. Sizes equal. Empty: 0. dot(a, a) is the sum of squares. O(n).
double dot(std::span<const double> a, std::span<const double> b);

// Natural logarithm: error below 0.7 units in the last place over the whole domain (subnormals and values
// near 1 too). Special values as IEC 60559: log(1) = +0, log(+-0) = -inf, log(inf) = inf; negative or NaN
// gives a quiet NaN, always the same one (payloads are not carried over). Floating-point exception flags
// are not part of the contract. Method: the series of artanh (Abramowitz and Stegun 4.1.27, number from
// memory), in kernels.cc.
double log(double x);
// Exponential: error below 0.7 units in the last place for normal results, below 0.9 for subnormal ones.
// exp(+-0) = 1, exp(-inf) = 0, exp(inf) = inf; overflows to inf above 709.78, underflows gradually to 0;
// NaN as above. Method: reduction by ln 2 in two parts (Cody and Waite 1980), Taylor series.
double exp(double x);
// out[k] = log(in[k]), exp(in[k]): the same bits as the calls above. Sizes equal; in and out may be the
// same memory but must not overlap otherwise. O(n), no allocation; any alignment.
void log(std::span<const double> in, std::span<double> out);
void exp(std::span<const double> in, std::span<double> out);

// Real cube root, of negative x too: error below 0.7 units in the last place, subnormal x included (the
// root of a subnormal is normal). cbrt(+-0) = +-0, cbrt(+-inf) = +-inf; NaN as above. Method: exp(log/3),
// then one step of Halley's iteration.
double cbrt(double x);

}  // namespace nightweigh::numerics

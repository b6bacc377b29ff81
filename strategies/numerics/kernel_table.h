// What kernels.cc exports, once for each level: a table of plain functions and nothing else. Internal to
// this folder; sizes are checked by the callers (functions.cpp, node_tiles.cpp).
//
// kernels.cc is compiled with instruction sets that the machine may lack, so nothing of it but the table
// may be visible to the linker: a template or inline function with external linkage, compiled there with
// AVX-512, could be the copy that the linker keeps for the whole program. Hence this header and kernels.cc
// use no standard library templates, and everything in kernels.cc is in an unnamed namespace.
#pragma once

#include <cstddef>

namespace nightweigh::numerics {

inline constexpr std::size_t tile_nodes = 16;
inline constexpr std::size_t lanes = 8;
inline constexpr std::size_t tile_alignment_bytes = 64;
// Rows of a tile that the night pass fetches ahead; as many stand, unused, behind the last tile. Measured:
// a tenth faster where the matrix does not fit the last cache, no slower where it does.
inline constexpr std::size_t prefetch_rows = 16;

// The tiles of a NodeTiles: element (node k, instrument i) stands at
// values[(k / 16) * 16 * instruments + i * 16 + k % 16], values aligned to 64 bytes and
// followed by prefetch_rows + 1 rows of 16 doubles that are never used.
struct TileView {
  const double* values;
  std::size_t instruments;
  std::size_t first_block;  // half-open range of blocks of 512 nodes
  std::size_t last_block;
};

// A matrix of days by nodes, a day contiguous; days are `stride` elements apart. Any alignment.
struct DayRows {
  double* values;
  std::size_t stride;
};
struct ConstDayRows {
  const double* values;
  std::size_t stride;
};

struct KernelTable {
  double (*sum)(const double* values, std::size_t count);
  double (*dot)(const double* a, const double* b, std::size_t count);
  void (*log)(const double* in, double* out, std::size_t count);
  void (*exp)(const double* in, double* out, std::size_t count);
  // y[t][k] = sum_i B[k][i] x[t * instruments + i]
  void (*forward)(TileView tiles, const double* x, std::size_t days, DayRows y);
  // partial[(block * days + t) * instruments + i] = sum over the block's nodes of B[k][i] s[t][k].
  // scratch: 8 * instruments doubles.
  void (*backward)(TileView tiles, ConstDayRows s, std::size_t days, double* partial, double* scratch);
  // wealth[k] *= y[k], brought back into range; s[k] = wealth[k] at the common step.
  void (*advance)(const double* y, double* wealth, double* steps, double common_step, double* s,
                  std::size_t first_node, std::size_t last_node);
  // forward, advance, backward; scratch as above.
  void (*night)(TileView tiles, const double* x, std::size_t days, double* wealth, double* steps,
                double common_step, double* partial, double* scratch);
};

extern const KernelTable kernels_scalar;
extern const KernelTable kernels_sse2;
extern const KernelTable kernels_avx2;
extern const KernelTable kernels_avx512;

// The table of the level in use.
const KernelTable& kernels();

}  // namespace nightweigh::numerics

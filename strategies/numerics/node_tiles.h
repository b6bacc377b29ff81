// Products over a matrix of nodes: K constant mixes ("nodes") of m instruments each, the hot loops of the
// universal portfolio. With B the K by m matrix, x a day's price relatives and S the nodes' wealth, a night
// is y = B x, S <- S * y (node by node), w = B' S.
//
// The matrix is packed in tiles of 16 nodes, tiles stand in blocks of 512 nodes, and K is filled up with zero
// rows to whole blocks. Added rows never change a result: their y, s and contributions are +0.
//
// All functions work on a range of blocks, write only what belongs to it and keep rules N1 to N4 of
// numerics.h: threads that own disjoint ranges may run at once and give the same bits as one thread, d
// days at once the same bits as d single days, and a night pass the same bits as its parts. None starts a
// thread. Vectors over nodes have padded_nodes() elements, any alignment. Days are stored one after the
// other: x as [day][instrument], y and s as [day][node], partial sums as [block][day][instrument].
// Wrong sizes or ranges are the caller's bug: std::logic_error before anything is written.
#pragma once

#include <cstddef>
#include <memory>
#include <span>

#include "strategies/numerics/numerics.h"

namespace nightweigh::numerics {

// Half-open range of blocks.
struct BlockRange {
  std::size_t first = 0;
  std::size_t last = 0;
};

// The packed matrix. 8 * m * padded_nodes() bytes, aligned to 64. Writing rows of different nodes from
// several threads is safe; products may run only when no one writes.
class NodeTiles {
 public:
  // All weights 0. nodes >= 1, instruments >= 1. Throws std::bad_alloc where memory is short.
  NodeTiles(std::size_t nodes, std::size_t instruments);

  std::size_t nodes() const { return nodes_; }
  std::size_t instruments() const { return instruments_; }
  std::size_t blocks() const { return blocks_; }
  std::size_t padded_nodes() const { return blocks_ * block_nodes; }
  BlockRange all() const { return {0, blocks_}; }
  // The part of the blocks that worker `index` of `workers` owns: contiguous, as equal as can be.
  BlockRange share(std::size_t index, std::size_t workers) const;

  // Row of one node (node < nodes()); m weights.
  void set(std::size_t node, std::span<const double> weights);
  void get(std::size_t node, std::span<double> weights) const;
  double at(std::size_t node, std::size_t instrument) const;

  // The packed values, padding included: to be kept in a file or hashed.
  std::span<const double> values() const { return {values_.get(), padded_nodes() * instruments_}; }
  // The same, to be filled from a file. Padding rows must be 0; false (and they are set to 0) where not.
  std::span<double> mutable_values() { return {values_.get(), padded_nodes() * instruments_}; }
  bool clear_padding();

 private:
  struct Release {
    void operator()(double* values) const;
  };
  std::size_t place(std::size_t node, std::size_t instrument) const;

  std::size_t nodes_;
  std::size_t instruments_;
  std::size_t blocks_;
  std::unique_ptr<double[], Release> values_;
};

// y[t][k] = sum_i B[k][i] x[t][i], by N1 and N3, for the nodes of the range. x: days * m; y: days *
// padded_nodes(). x finite. O(days * m * nodes of the range); one read of B for up to six days at once.
void forward(const NodeTiles& tiles, std::span<const double> x, std::size_t days, BlockRange range,
             std::span<double> y);

// partial[block][t][i] = sum over the block's nodes of B[k][i] s[t][k], by N1 and N2, for the blocks of the
// range. s: days * padded_nodes(), finite in padded nodes too; partial: blocks() * days * m, of which the
// range's part is written. Allocates 8 m doubles.
void backward(const NodeTiles& tiles, std::span<const double> s, std::size_t days, BlockRange range,
              std::span<double> partial);

// out[j] = partial[first][j] + partial[first + 1][j] + ... over the blocks of the range, in order (N2): the
// end of `backward` and of the night pass, once all threads are done. `out` has days * m elements, and
// partial a whole number of times as many. An empty range gives 0.
void add_blocks(std::span<const double> partial, BlockRange range, std::span<double> out);

// Node wealth that may run over thousands of days: wealth[k] * 2^(256 steps[k]) (steps: whole numbers held as
// doubles). Each day wealth is brought back into [2^-256, 2^256] by a power of two, decided by the node and
// the day alone, and exact. A day's y must be 0 or within [2^-256, 2^256] itself. Zero wealth stays zero.
//
// To be added up, nodes are brought to a common step c: s[k] = wealth[k] * 2^(256 (steps[k] - c)), where a
// node three or more steps below c counts as 0 (it is below 2^-256 of the largest). c should be the largest
// step before the day or the block of days; up to two more on the way are fine, beyond that s is infinite
// rather than wrong. Results for two values of c differ by a power of two exactly, so ratios (weights) do not
// depend on it.
//
// The largest step of a node with wealth above 0; 0 where there is none.
double largest_step(std::span<const double> wealth, std::span<const double> steps);
// wealth[k] <- wealth[k] y[k], range kept as above, and s[k] from the new wealth. Padded nodes: y = 0 makes
// their wealth and s 0.
void advance_wealth(const NodeTiles& tiles, std::span<const double> y, BlockRange range,
                    std::span<double> wealth, std::span<double> steps, double common_step,
                    std::span<double> s);

// The night pass: for each day forward, advance_wealth, backward, in one read of B from memory for all
// days (twelve at a time while a block is in cache). The new wealth of each day enters the same day's
// partial sums: [block][day][instrument], as `backward` writes them. Allocates 8 m doubles.
void night_pass(const NodeTiles& tiles, std::span<const double> x, std::size_t days, BlockRange range,
                std::span<double> wealth, std::span<double> steps, double common_step,
                std::span<double> partial);

}  // namespace nightweigh::numerics

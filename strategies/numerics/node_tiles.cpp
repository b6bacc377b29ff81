#include "strategies/numerics/node_tiles.h"

#include <algorithm>
#include <limits>
#include <new>
#include <stdexcept>
#include <string>

#include "strategies/numerics/kernel_table.h"

namespace nightweigh::numerics {
namespace {

constexpr std::align_val_t alignment{tile_alignment_bytes};
static_assert(block_nodes % tile_nodes == 0);

void require(bool holds, const char* function, const char* what) {
  if (!holds) throw std::logic_error(std::string("numerics::") + function + ": " + what);
}

void require_size(std::size_t is, std::size_t should_be, const char* function, const char* what) {
  if (is == should_be) return;
  throw std::logic_error(std::string("numerics::") + function + ": " + what + " has " + std::to_string(is) +
                         " elements, not " + std::to_string(should_be));
}

void require_range(const NodeTiles& tiles, BlockRange range, const char* function) {
  require(range.first <= range.last && range.last <= tiles.blocks(), function, "no such range of blocks");
}

TileView view(const NodeTiles& tiles, BlockRange range) {
  return {tiles.values().data(), tiles.instruments(), range.first, range.last};
}

// Lane sums of each instrument, aligned for the widest level.
class LaneSums {
 public:
  explicit LaneSums(std::size_t instruments)
      : values_(static_cast<double*>(::operator new(instruments* lanes * sizeof(double), alignment))) {}
  ~LaneSums() { ::operator delete(values_, alignment); }
  LaneSums(const LaneSums&) = delete;
  LaneSums& operator=(const LaneSums&) = delete;
  double* data() { return values_; }

 private:
  double* values_;
};

}  // namespace

void NodeTiles::Release::operator()(double* values) const {
  ::operator delete(values, alignment);
}

NodeTiles::NodeTiles(std::size_t nodes, std::size_t instruments) : nodes_(nodes), instruments_(instruments) {
  require(nodes >= 1 && instruments >= 1, "NodeTiles", "needs a node and an instrument");
  blocks_ = (nodes - 1) / block_nodes + 1;
  const std::size_t most = std::numeric_limits<std::size_t>::max() / sizeof(double) / 2;
  if (blocks_ > most / block_nodes / instruments) throw std::bad_alloc();
  const std::size_t count = padded_nodes() * instruments;
  const std::size_t behind = (prefetch_rows + 1) * tile_nodes;
  values_.reset(static_cast<double*>(::operator new((count + behind) * sizeof(double), alignment)));
  std::fill_n(values_.get(), count + behind, 0.0);
}

BlockRange NodeTiles::share(std::size_t index, std::size_t workers) const {
  require(index < workers, "NodeTiles::share", "no such worker");
  const std::size_t each = blocks_ / workers;
  const std::size_t more = blocks_ % workers;  // the first `more` workers own one block more
  const std::size_t first = index * each + std::min(index, more);
  return {first, first + each + (index < more ? 1 : 0)};
}

std::size_t NodeTiles::place(std::size_t node, std::size_t instrument) const {
  return (node / tile_nodes * instruments_ + instrument) * tile_nodes + node % tile_nodes;
}

void NodeTiles::set(std::size_t node, std::span<const double> weights) {
  require(node < nodes_, "NodeTiles::set", "no such node");
  require_size(weights.size(), instruments_, "NodeTiles::set", "weights");
  for (std::size_t i = 0; i < instruments_; ++i) values_[place(node, i)] = weights[i];
}

void NodeTiles::get(std::size_t node, std::span<double> weights) const {
  require(node < nodes_, "NodeTiles::get", "no such node");
  require_size(weights.size(), instruments_, "NodeTiles::get", "weights");
  for (std::size_t i = 0; i < instruments_; ++i) weights[i] = values_[place(node, i)];
}

double NodeTiles::at(std::size_t node, std::size_t instrument) const {
  require(node < nodes_ && instrument < instruments_, "NodeTiles::at", "no such node or instrument");
  return values_[place(node, instrument)];
}

bool NodeTiles::clear_padding() {
  bool was_clear = true;
  for (std::size_t node = nodes_; node < padded_nodes(); ++node) {
    for (std::size_t i = 0; i < instruments_; ++i) {
      double& value = values_[place(node, i)];
      was_clear = was_clear && value == 0;
      value = 0;
    }
  }
  return was_clear;
}

void forward(const NodeTiles& tiles, std::span<const double> x, std::size_t days, BlockRange range,
             std::span<double> y) {
  require_range(tiles, range, "forward");
  require_size(x.size(), days * tiles.instruments(), "forward", "x");
  require_size(y.size(), days * tiles.padded_nodes(), "forward", "y");
  kernels().forward(view(tiles, range), x.data(), days, {y.data(), tiles.padded_nodes()});
}

void backward(const NodeTiles& tiles, std::span<const double> s, std::size_t days, BlockRange range,
              std::span<double> partial) {
  require_range(tiles, range, "backward");
  require_size(s.size(), days * tiles.padded_nodes(), "backward", "s");
  require_size(partial.size(), tiles.blocks() * days * tiles.instruments(), "backward", "partial");
  LaneSums scratch(tiles.instruments());
  kernels().backward(view(tiles, range), {s.data(), tiles.padded_nodes()}, days, partial.data(),
                     scratch.data());
}

void add_blocks(std::span<const double> partial, BlockRange range, std::span<double> out) {
  const std::size_t size = out.size();
  require(range.first <= range.last, "add_blocks", "no such range of blocks");
  require(size == 0 ? partial.empty() : partial.size() % size == 0 && range.last <= partial.size() / size,
          "add_blocks", "partial does not hold these blocks");
  std::fill(out.begin(), out.end(), 0.0);
  for (std::size_t block = range.first; block < range.last; ++block) {
    for (std::size_t j = 0; j < size; ++j) out[j] += partial[block * size + j];
  }
}

double largest_step(std::span<const double> wealth, std::span<const double> steps) {
  require_size(steps.size(), wealth.size(), "largest_step", "steps");
  bool found = false;
  double largest = 0;
  for (std::size_t k = 0; k < wealth.size(); ++k) {
    if (!(wealth[k] > 0) || (found && steps[k] <= largest)) continue;
    largest = steps[k];
    found = true;
  }
  return largest;
}

void advance_wealth(const NodeTiles& tiles, std::span<const double> y, BlockRange range,
                    std::span<double> wealth, std::span<double> steps, double common_step,
                    std::span<double> s) {
  require_range(tiles, range, "advance_wealth");
  require_size(y.size(), tiles.padded_nodes(), "advance_wealth", "y");
  require_size(wealth.size(), tiles.padded_nodes(), "advance_wealth", "wealth");
  require_size(steps.size(), tiles.padded_nodes(), "advance_wealth", "steps");
  require_size(s.size(), tiles.padded_nodes(), "advance_wealth", "s");
  kernels().advance(y.data(), wealth.data(), steps.data(), common_step, s.data(), range.first * block_nodes,
                    range.last * block_nodes);
}

void night_pass(const NodeTiles& tiles, std::span<const double> x, std::size_t days, BlockRange range,
                std::span<double> wealth, std::span<double> steps, double common_step,
                std::span<double> partial) {
  require_range(tiles, range, "night_pass");
  require_size(x.size(), days * tiles.instruments(), "night_pass", "x");
  require_size(wealth.size(), tiles.padded_nodes(), "night_pass", "wealth");
  require_size(steps.size(), tiles.padded_nodes(), "night_pass", "steps");
  require_size(partial.size(), tiles.blocks() * days * tiles.instruments(), "night_pass", "partial");
  LaneSums scratch(tiles.instruments());
  kernels().night(view(tiles, range), x.data(), days, wealth.data(), steps.data(), common_step,
                  partial.data(), scratch.data());
}

}  // namespace nightweigh::numerics

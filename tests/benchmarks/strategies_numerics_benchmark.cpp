// How near the night pass comes to the machine: against a streaming read of the same bytes in the same run,
// and blocks of days against Eigen's matrix product (compiled for AVX2 without fused multiply-add where this
// file is). Counters: `of_stream` = best rate of the pass / best rate of the plain read; `of_eigen` likewise.
// Argument: the number of instruments, of nodes, and (for blocks) of days.
#include <benchmark/benchmark.h>

#include <Eigen/Dense>
#include <algorithm>
#include <chrono>
#include <cmath>
#include <cstdint>
#include <cstring>
#include <limits>
#include <vector>

#include "strategies/numerics/node_tiles.h"

namespace nightweigh::numerics {
namespace {

double seconds_of(const auto& work) {
  const auto begin = std::chrono::steady_clock::now();
  work();
  return std::chrono::duration<double>(std::chrono::steady_clock::now() - begin).count();
}

NodeTiles tiles_for_benchmark(std::size_t nodes, std::size_t instruments) {
  NodeTiles tiles(nodes, instruments);
  std::vector<double> row(instruments);
  for (std::size_t k = 0; k < nodes; ++k) {
    for (std::size_t i = 0; i < instruments; ++i) {
      row[i] = static_cast<double>((k * 31 + i * 17) % 97 + 1) / (50.0 * static_cast<double>(instruments));
    }
    tiles.set(k, row);
  }
  return tiles;
}

// A plain read: every element once, into 8 independent sums of 32 bytes; the fastest form that was found.
double read_all(std::span<const double> values) {
  typedef double Four __attribute__((vector_size(32)));
  Four total[8] = {};
  for (std::size_t k = 0; k + 32 <= values.size(); k += 32) {
#pragma GCC unroll 8
    for (std::size_t j = 0; j < 8; ++j) {
      Four v;
      std::memcpy(&v, values.data() + k + 4 * j, sizeof v);
      total[j] += v;
    }
  }
  Four result = {};
  for (const Four& each : total) result += each;
  return result[0] + result[1] + result[2] + result[3];
}

void night(benchmark::State& state) {
  const auto instruments = static_cast<std::size_t>(state.range(0));
  const NodeTiles tiles = tiles_for_benchmark(static_cast<std::size_t>(state.range(1)), instruments);
  const std::vector<double> x(instruments, 1.001);
  std::vector<double> wealth(tiles.padded_nodes(), 1.0), steps(tiles.padded_nodes(), 0.0);
  std::vector<double> partial(tiles.blocks() * instruments), w(instruments);
  double pass_s = std::numeric_limits<double>::infinity();
  double read_s = pass_s;
  for (auto _ : state) {
    const double elapsed = seconds_of([&] {
      night_pass(tiles, x, 1, tiles.all(), wealth, steps, 0, partial);
      add_blocks(partial, tiles.all(), w);
    });
    benchmark::DoNotOptimize(w.data());
    state.SetIterationTime(elapsed);
    pass_s = std::min(pass_s, elapsed);
    double total = 0;
    read_s =
        std::min(read_s, seconds_of([&] { benchmark::DoNotOptimize(total = read_all(tiles.values())); }));
    std::fill(wealth.begin(), wealth.end(), 1.0);
  }
  state.SetBytesProcessed(static_cast<std::int64_t>(tiles.values().size_bytes()) * state.iterations());
  state.counters["read_GBps"] = static_cast<double>(tiles.values().size_bytes()) / read_s / 1e9;
  state.counters["pass_GBps"] = static_cast<double>(tiles.values().size_bytes()) / pass_s / 1e9;
  state.counters["of_stream"] = read_s / pass_s;
}
BENCHMARK(night)
    ->Args({10, 16384})
    ->Args({100, 16384})
    ->Args({100, 65536})
    ->Args({500, 8192})
    ->Args({500, 32768})
    ->UseManualTime();

void days_block(benchmark::State& state) {
  const auto instruments = static_cast<std::size_t>(state.range(0));
  const NodeTiles tiles = tiles_for_benchmark(static_cast<std::size_t>(state.range(1)), instruments);
  const auto days = static_cast<std::size_t>(state.range(2));
  const auto m = static_cast<Eigen::Index>(instruments);
  const auto k = static_cast<Eigen::Index>(tiles.padded_nodes());
  const auto d = static_cast<Eigen::Index>(days);
  const Eigen::MatrixXd b = Eigen::MatrixXd::Constant(k, m, 1.0 / static_cast<double>(instruments));
  const Eigen::MatrixXd eigen_x = Eigen::MatrixXd::Constant(m, d, 1.001);
  Eigen::MatrixXd eigen_y(k, d), eigen_w(m, d);
  const std::vector<double> x(days * instruments, 1.001);
  std::vector<double> wealth(tiles.padded_nodes(), 1.0), steps(tiles.padded_nodes(), 0.0);
  std::vector<double> partial(tiles.blocks() * days * instruments), w(days * instruments);
  double pass_s = std::numeric_limits<double>::infinity();
  double eigen_s = pass_s;
  for (auto _ : state) {
    const double elapsed = seconds_of([&] {
      night_pass(tiles, x, days, tiles.all(), wealth, steps, 0, partial);
      add_blocks(partial, tiles.all(), w);
    });
    benchmark::DoNotOptimize(w.data());
    state.SetIterationTime(elapsed);
    pass_s = std::min(pass_s, elapsed);
    eigen_s = std::min(eigen_s, seconds_of([&] {
                         eigen_y.noalias() = b * eigen_x;
                         eigen_w.noalias() = b.transpose() * eigen_y;
                       }));
    benchmark::DoNotOptimize(eigen_w.data());
    std::fill(wealth.begin(), wealth.end(), 1.0);
  }
  const double flops = 4.0 * static_cast<double>(tiles.padded_nodes() * instruments * days);
  state.counters["gflops"] = flops / pass_s / 1e9;
  state.counters["of_eigen"] = eigen_s / pass_s;
}
BENCHMARK(days_block)
    ->Args({10, 16384, 64})
    ->Args({100, 16384, 12})
    ->Args({100, 16384, 64})
    ->Args({500, 8192, 64})
    ->UseManualTime();

void logarithms(benchmark::State& state) {
  std::vector<double> in(4096), out(4096);
  for (std::size_t k = 0; k < in.size(); ++k) in[k] = 0.5 + static_cast<double>(k) / 4096;
  for (auto _ : state) {
    log(in, out);
    benchmark::DoNotOptimize(out.data());
  }
  state.SetItemsProcessed(4096 * state.iterations());
}
BENCHMARK(logarithms);

void exponentials(benchmark::State& state) {
  std::vector<double> in(4096), out(4096);
  for (std::size_t k = 0; k < in.size(); ++k) in[k] = static_cast<double>(k) / 4096 - 0.5;
  for (auto _ : state) {
    exp(in, out);
    benchmark::DoNotOptimize(out.data());
  }
  state.SetItemsProcessed(4096 * state.iterations());
}
BENCHMARK(exponentials);

}  // namespace
}  // namespace nightweigh::numerics

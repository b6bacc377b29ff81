// One set of data, every level of the machine, days one by one and in blocks, one and two threads, buffers
// shifted by 8 to 56 bytes: one hash for each computation. The hashes are kept with numerics_version in
// tests/data/numerics_bits.json; to renew them after raising the version, run this program once with
// NIGHTWEIGH_RENEW=1 and read the difference.
#include <doctest/doctest.h>

#include <cinttypes>
#include <cstdio>
#include <cstdlib>
#include <fstream>
#include <map>
#include <nlohmann/json.hpp>
#include <string>
#include <thread>

#include "strategies/numerics/node_tiles.h"
#include "tests/unit/strategies/numerics/support.h"

namespace nightweigh::numerics {
namespace {

using testing::hash_of;
using testing::Random;
using testing::Shifted;

constexpr std::size_t nodes = 1700;
constexpr std::size_t instruments = 37;
constexpr std::size_t days = 17;

struct Data {
  NodeTiles tiles{nodes, instruments};
  std::vector<double> x, s, positive, exponents;

  Data() {
    Random random(20260302);
    std::vector<double> row(instruments);
    for (std::size_t k = 0; k < nodes; ++k) {
      for (double& weight : row) weight = random.uniform() / instruments;
      tiles.set(k, row);
    }
    for (std::size_t j = 0; j < days * instruments; ++j) x.push_back(random.between(0.9, 1.3));
    // One day so steep that wealth leaves its range, both ways.
    for (std::size_t i = 0; i < instruments; ++i) x[5 * instruments + i] = 0x1p-200 * random.uniform();
    for (std::size_t i = 0; i < instruments; ++i) x[6 * instruments + i] = 0x1p-100 * random.uniform();
    for (std::size_t j = 0; j < days * tiles.padded_nodes(); ++j) s.push_back(random.between(-1, 3));
    for (int j = 0; j < 20'000; ++j) {
      positive.push_back(std::bit_cast<double>(random.next() >> 1));  // NaNs and subnormals among them
      positive.push_back(random.between(0.5, 2));
      exponents.push_back(random.between(-760, 720));
      exponents.push_back(random.between(-0.1, 0.1));
    }
  }
};

struct Way {
  bool by_block = false;
  std::size_t threads = 1;
  std::size_t shift = 0;
};

// Runs work(range) on `threads` threads that own disjoint ranges of blocks.
template <typename Work>
void on_threads(const NodeTiles& tiles, std::size_t threads, const Work& work) {
  std::vector<std::thread> started;
  for (std::size_t index = 1; index < threads; ++index) {
    started.emplace_back([&, index] { work(tiles.share(index, threads)); });
  }
  work(tiles.share(0, threads));
  for (std::thread& thread : started) thread.join();
}

std::span<const double> day_of(std::span<const double> values, std::size_t t, std::size_t size) {
  return values.subspan(t * size, size);
}

std::uint64_t forward_hash(const Data& data, Way way) {
  const std::size_t padded = data.tiles.padded_nodes();
  const Shifted x(data.x, way.shift);
  const Shifted y(std::vector<double>(days * padded), (way.shift + 3) % 8);
  on_threads(data.tiles, way.threads, [&](BlockRange range) {
    if (way.by_block) return forward(data.tiles, x.view(), days, range, y.view());
    for (std::size_t t = 0; t < days; ++t) {
      forward(data.tiles, day_of(x.view(), t, instruments), 1, range, y.view().subspan(t * padded, padded));
    }
  });
  return hash_of(y.view());
}

std::uint64_t backward_hash(const Data& data, Way way) {
  const std::size_t padded = data.tiles.padded_nodes();
  const Shifted s(data.s, way.shift);
  const Shifted w(std::vector<double>(days * instruments), (way.shift + 5) % 8);
  if (way.by_block) {
    std::vector<double> partial(data.tiles.blocks() * days * instruments);
    on_threads(data.tiles, way.threads,
               [&](BlockRange range) { backward(data.tiles, s.view(), days, range, partial); });
    add_blocks(partial, data.tiles.all(), w.view());
    return hash_of(w.view());
  }
  for (std::size_t t = 0; t < days; ++t) {
    std::vector<double> partial(data.tiles.blocks() * instruments);
    on_threads(data.tiles, way.threads, [&](BlockRange range) {
      backward(data.tiles, day_of(s.view(), t, padded), 1, range, partial);
    });
    add_blocks(partial, data.tiles.all(), w.view().subspan(t * instruments, instruments));
  }
  return hash_of(w.view());
}

// Weighted sums of every day, then the wealth and steps that remain.
std::uint64_t night_hash(const Data& data, Way way) {
  const std::size_t padded = data.tiles.padded_nodes();
  const Shifted x(data.x, way.shift);
  const Shifted wealth(std::vector<double>(padded, 0x1p-100), (way.shift + 1) % 8);
  const Shifted steps(std::vector<double>(padded, 0.0), (way.shift + 2) % 8);
  std::vector<double> w(days * instruments);
  if (way.by_block) {
    std::vector<double> partial(data.tiles.blocks() * days * instruments);
    on_threads(data.tiles, way.threads, [&](BlockRange range) {
      night_pass(data.tiles, x.view(), days, range, wealth.view(), steps.view(), 0, partial);
    });
    add_blocks(partial, data.tiles.all(), w);
  } else {
    for (std::size_t t = 0; t < days; ++t) {
      std::vector<double> partial(data.tiles.blocks() * instruments);
      on_threads(data.tiles, way.threads, [&](BlockRange range) {
        night_pass(data.tiles, day_of(x.view(), t, instruments), 1, range, wealth.view(), steps.view(), 0,
                   partial);
      });
      add_blocks(partial, data.tiles.all(), std::span(w).subspan(t * instruments, instruments));
    }
  }
  w.insert(w.end(), wealth.view().begin(), wealth.view().end());
  w.insert(w.end(), steps.view().begin(), steps.view().end());
  return hash_of(w);
}

// The night pass by its three parts.
std::uint64_t night_by_parts_hash(const Data& data, Way way) {
  const std::size_t padded = data.tiles.padded_nodes();
  const Shifted wealth(std::vector<double>(padded, 0x1p-100), way.shift);
  const Shifted steps(std::vector<double>(padded, 0.0), way.shift);
  const Shifted y(std::vector<double>(padded), way.shift);
  std::vector<double> w(days * instruments), partial(data.tiles.blocks() * instruments);
  for (std::size_t t = 0; t < days; ++t) {
    forward(data.tiles, day_of(data.x, t, instruments), 1, data.tiles.all(), y.view());
    advance_wealth(data.tiles, y.view(), data.tiles.all(), wealth.view(), steps.view(), 0, y.view());
    backward(data.tiles, y.view(), 1, data.tiles.all(), partial);
    add_blocks(partial, data.tiles.all(), std::span(w).subspan(t * instruments, instruments));
  }
  w.insert(w.end(), wealth.view().begin(), wealth.view().end());
  w.insert(w.end(), steps.view().begin(), steps.view().end());
  return hash_of(w);
}

std::uint64_t function_hash(std::span<const double> in, std::size_t shift,
                            void (*function)(std::span<const double>, std::span<double>)) {
  const Shifted from(in, shift);
  const Shifted to(in, (shift + 3) % 8);
  function(from.view(), to.view());
  return hash_of(to.view());
}

std::uint64_t sums_hash(const Data& data, std::size_t shift, bool products) {
  const Shifted a(data.s, shift);
  const Shifted b(data.s, (shift + 3) % 8);
  std::vector<double> results;
  for (std::size_t size = 0; size < 1600; size += 13) {
    results.push_back(products ? dot(a.view().first(size), b.view().subspan(7, size))
                               : sum(a.view().first(size)));
  }
  return hash_of(results);
}

std::uint64_t cbrt_hash(const Data& data) {
  std::vector<double> results;
  for (double x : data.exponents) results.push_back(cbrt(x));
  return hash_of(results);
}

using Hashes = std::map<std::string, std::uint64_t>;

// All hashes of the level in use; any way that disagrees fails here.
Hashes hashes_of(const Data& data) {
  Hashes hashes;
  const auto add = [&](const std::string& name, std::uint64_t hash) {
    const auto [at, is_new] = hashes.emplace(name, hash);
    CHECK_MESSAGE(at->second == hash, name << " differs on level " << name_of(level()));
  };
  for (bool by_block : {false, true}) {
    for (std::size_t threads : {1, 2}) {
      for (std::size_t shift = 0; shift < 8; ++shift) {
        const Way way{by_block, threads, shift};
        add("forward", forward_hash(data, way));
        add("backward", backward_hash(data, way));
        add("night", night_hash(data, way));
      }
    }
  }
  for (std::size_t shift = 0; shift < 8; ++shift) {
    add("night", night_by_parts_hash(data, {.shift = shift}));
    add("log", function_hash(data.positive, shift, log));
    add("exp", function_hash(data.exponents, shift, exp));
    add("sum", sums_hash(data, shift, false));
    add("dot", sums_hash(data, shift, true));
  }
  add("cbrt", cbrt_hash(data));
  return hashes;
}

std::string text_of(std::uint64_t hash) {
  char text[17];
  std::snprintf(text, sizeof text, "%016" PRIx64, hash);
  return text;
}

TEST_CASE("the same bits on every level, by day and by block, for one and two threads, for any alignment") {
  const testing::KeepLevel keep;
  const Data data;
  Hashes first;
  for (Level each : levels_here()) {
    REQUIRE(force_level(each));
    REQUIRE(level() == each);
    const Hashes hashes = hashes_of(data);
    for (const auto& [name, hash] : hashes) {
      std::printf("  %-7s %-9s %s\n", std::string(name_of(each)).c_str(), name.c_str(),
                  text_of(hash).c_str());
    }
    if (first.empty()) first = hashes;
    CHECK_MESSAGE(hashes == first,
                  "level " << name_of(each) << " differs from " << name_of(levels_here()[0]));
  }
  for (Level each : levels_missing()) {
    std::printf("  %-7s skipped: this machine does not have it\n", std::string(name_of(each)).c_str());
    CHECK_FALSE(force_level(each));
  }
#if defined(__x86_64__)
  CHECK_MESSAGE(levels_here().size() >= 2, "fewer than two levels ran");
#endif

  const std::string path = std::string(NIGHTWEIGH_TEST_DATA) + "/numerics_bits.json";
  if (std::getenv("NIGHTWEIGH_RENEW") != nullptr) {
    nlohmann::json renewed = {{"numerics_version", numerics_version}};
    for (const auto& [name, hash] : first) renewed["hashes"][name] = text_of(hash);
    std::ofstream(path) << renewed.dump(2) << "\n";
  }
  std::ifstream file(path);
  REQUIRE_MESSAGE(file.good(), path << " is missing");
  const nlohmann::json kept = nlohmann::json::parse(file);
  CHECK_MESSAGE(kept.at("numerics_version") == numerics_version,
                "numerics_version was raised: renew tests/data/numerics_bits.json");
  CHECK(kept.at("hashes").size() == first.size());
  for (const auto& entry : first) {
    CHECK_MESSAGE(
        kept.at("hashes").at(entry.first) == text_of(entry.second),
        entry.first << ": bits changed; raise numerics_version, then renew tests/data/numerics_bits.json");
  }
}

TEST_CASE("levels: ascending, scalar always there, none both here and missing") {
  const std::vector<Level> here = levels_here();
  REQUIRE_FALSE(here.empty());
  CHECK(here.front() == Level::scalar);
  CHECK(here.size() + levels_missing().size() == 4);
  for (std::size_t k = 1; k < here.size(); ++k) CHECK(here[k - 1] < here[k]);
  CHECK(level() == here.back());
}

TEST_CASE("profile names processor class, C library and compiler") {
  const std::string text = profile();
  std::printf("  profile: %s\n", text.c_str());
  CHECK(std::count(text.begin(), text.end(), ' ') == 2);
#if defined(__x86_64__)
  CHECK(text.rfind("x86_64 ", 0) == 0);
#endif
  CHECK(text == profile());
}

// Published with the reference implementation (Vigna, splitmix64.c; from memory): seed 1234567.
TEST_CASE("the test data's generator gives its published numbers") {
  Random random(1234567);
  CHECK(random.next() == 6457827717110365317u);
  CHECK(random.next() == 3203168211198807973u);
  CHECK(random.next() == 9817491932198370423u);
}

}  // namespace
}  // namespace nightweigh::numerics

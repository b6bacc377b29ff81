// Products over node tiles: literal references, exact whole numbers, wealth over long spans, bad sizes.
#include "strategies/numerics/node_tiles.h"

#include <doctest/doctest.h>

#include <cmath>
#include <limits>
#include <stdexcept>

#include "tests/unit/strategies/numerics/support.h"

namespace nightweigh::numerics {
namespace {

using testing::Random;

NodeTiles random_tiles(std::size_t nodes, std::size_t instruments, Random& random) {
  NodeTiles tiles(nodes, instruments);
  std::vector<double> row(instruments);
  for (std::size_t k = 0; k < nodes; ++k) {
    double total = 0;
    for (double& weight : row) total += weight = random.uniform();
    for (double& weight : row) weight /= total;
    tiles.set(k, row);
  }
  return tiles;
}

std::vector<double> draw(std::size_t size, double low, double high, Random& random) {
  std::vector<double> values(size);
  for (double& value : values) value = random.between(low, high);
  return values;
}

// Rules N1 and N3 written down literally.
std::vector<double> literal_forward(const NodeTiles& tiles, std::span<const double> x, std::size_t days) {
  std::vector<double> y(days * tiles.padded_nodes());
  for (std::size_t t = 0; t < days; ++t) {
    for (std::size_t k = 0; k < tiles.nodes(); ++k) {
      double total = 0;
      for (std::size_t i = 0; i < tiles.instruments(); ++i) {
        total += tiles.at(k, i) * x[t * tiles.instruments() + i];
      }
      y[t * tiles.padded_nodes() + k] = total;
    }
  }
  return y;
}

// Rules N1 and N2 written down literally.
std::vector<double> literal_backward(const NodeTiles& tiles, std::span<const double> s, std::size_t days) {
  const std::size_t m = tiles.instruments();
  std::vector<double> partial(tiles.blocks() * days * m);
  for (std::size_t block = 0; block < tiles.blocks(); ++block) {
    for (std::size_t t = 0; t < days; ++t) {
      for (std::size_t i = 0; i < m; ++i) {
        double l[8] = {};
        for (std::size_t k = block * 512; k < block * 512 + 512 && k < tiles.nodes(); ++k) {
          l[k % 8] += tiles.at(k, i) * s[t * tiles.padded_nodes() + k];
        }
        partial[(block * days + t) * m + i] =
            ((l[0] + l[4]) + (l[2] + l[6])) + ((l[1] + l[5]) + (l[3] + l[7]));
      }
    }
  }
  return partial;
}

TEST_CASE("rows come back as they were set; padding is zero") {
  Random random(1);
  for (std::size_t nodes : {1, 31, 32, 33, 512, 513}) {
    for (std::size_t m : {1, 2, 9}) {
      NodeTiles tiles(nodes, m);
      CHECK(tiles.padded_nodes() % 512 == 0);
      CHECK(tiles.padded_nodes() - nodes < 512);
      CHECK(reinterpret_cast<std::uintptr_t>(tiles.values().data()) % 64 == 0);
      std::vector<std::vector<double>> rows;
      for (std::size_t k = 0; k < nodes; ++k) {
        rows.push_back(draw(m, 1, 2, random));
        tiles.set(k, rows.back());
      }
      std::vector<double> row(m);
      for (std::size_t k = 0; k < nodes; ++k) {
        tiles.get(k, row);
        CHECK(row == rows[k]);
        CHECK(tiles.at(k, m - 1) == rows[k][m - 1]);
      }
      std::size_t nonzero = 0;
      for (double value : tiles.values()) nonzero += value != 0 ? 1 : 0;
      CHECK(nonzero == nodes * m);
      CHECK(tiles.clear_padding());
      tiles.mutable_values().back() = 1;
      CHECK(tiles.clear_padding() == (nodes == tiles.padded_nodes()));
    }
  }
}

TEST_CASE("forward and backward keep their rules to the bit, for any number of days, on every level") {
  const testing::KeepLevel keep;
  Random random(2);
  const struct {
    std::size_t nodes, instruments, days;
  } shapes[] = {{1, 1, 1},   {7, 3, 2},    {32, 2, 3},  {33, 5, 4},   {512, 4, 5},
                {513, 7, 6}, {1100, 9, 7}, {600, 1, 8}, {700, 6, 13}, {1025, 37, 19}};
  for (const auto& shape : shapes) {
    const std::size_t nodes = shape.nodes, m = shape.instruments, days = shape.days;
    const NodeTiles tiles = random_tiles(nodes, m, random);
    const std::vector<double> x = draw(days * m, 0.9, 1.1, random);
    const std::vector<double> s = draw(days * tiles.padded_nodes(), 0, 2, random);
    const std::vector<double> expected_y = literal_forward(tiles, x, days);
    const std::vector<double> expected_w = literal_backward(tiles, s, days);
    for (Level each : levels_here()) {
      CAPTURE(name_of(each));
      CAPTURE(nodes);
      REQUIRE(force_level(each));
      std::vector<double> y(expected_y.size(), -1), w(expected_w.size(), -1);
      forward(tiles, x, days, tiles.all(), y);
      backward(tiles, s, days, tiles.all(), w);
      CHECK(testing::same_bits(y, expected_y));
      CHECK(testing::same_bits(w, expected_w));
    }
  }
}

TEST_CASE("products of whole numbers are exact") {
  Random random(3);
  const std::size_t nodes = 1300, m = 11;
  NodeTiles tiles(nodes, m);
  std::vector<std::vector<std::int64_t>> b(nodes, std::vector<std::int64_t>(m));
  std::vector<double> row(m), x(m), s(tiles.padded_nodes(), 7.0);  // weights on padding must not matter
  for (std::size_t k = 0; k < nodes; ++k) {
    for (std::size_t i = 0; i < m; ++i) {
      b[k][i] = static_cast<std::int64_t>(random.next() % 100);
      row[i] = static_cast<double>(b[k][i]);
    }
    tiles.set(k, row);
    s[k] = static_cast<double>(random.next() % 1000);
  }
  for (double& value : x) value = static_cast<double>(random.next() % 1000);
  std::vector<double> y(tiles.padded_nodes()), partial(tiles.blocks() * m), w(m);
  forward(tiles, x, 1, tiles.all(), y);
  backward(tiles, s, 1, tiles.all(), partial);
  add_blocks(partial, tiles.all(), w);
  for (std::size_t k = 0; k < nodes; ++k) {
    std::int64_t exact = 0;
    for (std::size_t i = 0; i < m; ++i) exact += b[k][i] * static_cast<std::int64_t>(x[i]);
    CHECK(y[k] == static_cast<double>(exact));
  }
  for (std::size_t i = 0; i < m; ++i) {
    std::int64_t exact = 0;
    for (std::size_t k = 0; k < nodes; ++k) exact += b[k][i] * static_cast<std::int64_t>(s[k]);
    CHECK(w[i] == static_cast<double>(exact));
  }
}

TEST_CASE("products are within the published error bound of a long double reference") {
  // |error| <= n u / (1 - n u) * sum |terms|: Higham, Accuracy and Stability of Numerical Algorithms
  // (2002), section 3.1; n = 40 covers m = 40 ascending terms. For w: 64 adds a lane, the tree, the blocks.
  Random random(4);
  const std::size_t nodes = 2000, m = 40;
  const NodeTiles tiles = random_tiles(nodes, m, random);
  const std::vector<double> x = draw(m, 0.9, 1.1, random);
  const std::vector<double> s = draw(tiles.padded_nodes(), 0, 2, random);
  std::vector<double> y(tiles.padded_nodes()), partial(tiles.blocks() * m), w(m);
  forward(tiles, x, 1, tiles.all(), y);
  backward(tiles, s, 1, tiles.all(), partial);
  add_blocks(partial, tiles.all(), w);
  const double unit = 0x1p-53;
  for (std::size_t k = 0; k < nodes; ++k) {
    long double truth = 0;
    for (std::size_t i = 0; i < m; ++i) truth += static_cast<long double>(tiles.at(k, i)) * x[i];
    CHECK(std::fabs(y[k] - static_cast<double>(truth)) <= 41 * unit * static_cast<double>(truth));
  }
  for (std::size_t i = 0; i < m; ++i) {
    long double truth = 0;
    for (std::size_t k = 0; k < nodes; ++k) truth += static_cast<long double>(tiles.at(k, i)) * s[k];
    CHECK(std::fabs(w[i] - static_cast<double>(truth)) <= 73 * unit * static_cast<double>(truth));
  }
}

TEST_CASE("a range of blocks writes its own part alone; shares cover all blocks once") {
  Random random(5);
  const NodeTiles tiles = random_tiles(512 * 5 - 3, 4, random);
  const std::vector<double> x = draw(2 * 4, 0.9, 1.1, random);
  const std::size_t padded = tiles.padded_nodes();
  std::vector<double> all(2 * padded), part(2 * padded, -1);
  forward(tiles, x, 2, tiles.all(), all);
  forward(tiles, x, 2, {1, 3}, part);
  for (std::size_t j = 0; j < part.size(); ++j) {
    const std::size_t block = j % padded / 512;
    CHECK(part[j] == (block == 1 || block == 2 ? all[j] : -1));
  }
  for (std::size_t workers : {1, 2, 3, 5, 9}) {
    std::size_t next = 0;
    for (std::size_t index = 0; index < workers; ++index) {
      const BlockRange range = tiles.share(index, workers);
      CHECK(range.first == next);
      next = range.last;
    }
    CHECK(next == tiles.blocks());
  }
}

TEST_CASE("wealth keeps its value over spans that no double holds") {
  // Nodes that earn 8, 1/8 and 1 a day for 5000 days: 2^15000, 2^-15000 and 1, all exact.
  const testing::KeepLevel keep;
  for (Level each : levels_here()) {
    REQUIRE(force_level(each));
    NodeTiles tiles(3, 3);
    for (std::size_t k = 0; k < 3; ++k) {
      std::vector<double> row(3, 0.0);
      row[k] = 1;
      tiles.set(k, row);
    }
    const std::vector<double> x = {8, 0.125, 1};
    std::vector<double> wealth(tiles.padded_nodes(), 1.0), steps(tiles.padded_nodes(), 0.0), partial(3);
    double largest_seen = 0;
    for (int day = 1; day <= 5000; ++day) {
      const double common = largest_step(wealth, steps);
      night_pass(tiles, x, 1, tiles.all(), wealth, steps, common, partial);
      const double exponents[] = {3.0 * day, -3.0 * day, 0.0};
      for (std::size_t k = 0; k < 3; ++k) {
        CHECK(wealth[k] >= 0x1p-256);
        CHECK(wealth[k] <= 0x1p256);
        CHECK(std::log2(wealth[k]) + 256 * steps[k] == exponents[k]);
        const double in_common = exponents[k] - 256 * common;
        if (in_common > -500) {
          CHECK(partial[k] == std::exp2(in_common));
        } else {
          CHECK(partial[k] <= std::exp2(-500));
        }
      }
      largest_seen = std::max(largest_seen, common);
      CHECK(wealth[3] == 0);  // padding
    }
    CHECK(largest_seen == 58);
  }
}

TEST_CASE("zero wealth stays zero, and a common step far too low gives infinity, not a wrong number") {
  NodeTiles tiles(2, 1);
  tiles.set(0, std::vector<double>{1.0});
  tiles.set(1, std::vector<double>{1.0});
  std::vector<double> wealth(tiles.padded_nodes(), 1.0), steps(tiles.padded_nodes(), 0.0), partial(1);
  wealth[1] = 0;
  night_pass(tiles, std::vector<double>{0.5}, 1, tiles.all(), wealth, steps, 0, partial);
  CHECK(wealth[1] == 0);
  CHECK(steps[1] == 0);
  CHECK(partial[0] == 0.5);
  CHECK(largest_step(wealth, steps) == 0);
  night_pass(tiles, std::vector<double>{1.0}, 1, tiles.all(), wealth, steps, -3, partial);
  CHECK(partial[0] == std::numeric_limits<double>::infinity());
  night_pass(tiles, std::vector<double>{1.0}, 1, tiles.all(), wealth, steps, 3, partial);
  CHECK(partial[0] == 0);
  night_pass(tiles, std::vector<double>{1.0}, 1, tiles.all(), wealth, steps, -1, partial);
  CHECK(partial[0] == 0x1p255);
}

TEST_CASE("ratios do not depend on the common step") {
  Random random(6);
  const NodeTiles tiles = random_tiles(900, 5, random);
  const std::vector<double> x = draw(5, 0.9, 1.1, random);
  std::vector<double> results[3];
  const double common_steps[] = {-1, 0, 1};
  for (int which = 0; which < 3; ++which) {
    std::vector<double> wealth(tiles.padded_nodes(), 1.0), steps(tiles.padded_nodes(), 0.0);
    results[which].resize(tiles.blocks() * 5);
    night_pass(tiles, x, 1, tiles.all(), wealth, steps, common_steps[which], results[which]);
  }
  for (std::size_t j = 0; j < results[0].size(); ++j) {
    CHECK(results[0][j] == results[1][j] * 0x1p256);
    CHECK(results[2][j] == results[1][j] * 0x1p-256);
  }
}

TEST_CASE("bad sizes and ranges are logic errors, and nothing is written") {
  CHECK_THROWS_AS(NodeTiles(0, 3), std::logic_error);
  CHECK_THROWS_AS(NodeTiles(3, 0), std::logic_error);
  CHECK_THROWS_AS(NodeTiles(std::numeric_limits<std::size_t>::max() / 4, 1000), std::bad_alloc);
  NodeTiles tiles(600, 3);
  std::vector<double> two(2), three(3), nodes(1024, 1.0), partial(6, -1);
  CHECK_THROWS_AS(tiles.set(600, three), std::logic_error);
  CHECK_THROWS_AS(tiles.set(0, two), std::logic_error);
  CHECK_THROWS_AS(tiles.get(0, two), std::logic_error);
  CHECK_THROWS_AS(tiles.at(0, 3), std::logic_error);
  CHECK_THROWS_AS(tiles.share(2, 2), std::logic_error);
  CHECK_THROWS_AS(forward(tiles, two, 1, tiles.all(), nodes), std::logic_error);
  CHECK_THROWS_AS(forward(tiles, three, 1, tiles.all(), two), std::logic_error);
  CHECK_THROWS_AS(forward(tiles, three, 1, {0, 3}, nodes), std::logic_error);
  CHECK_THROWS_AS(forward(tiles, three, 1, {2, 1}, nodes), std::logic_error);
  CHECK_THROWS_AS(backward(tiles, three, 1, tiles.all(), partial), std::logic_error);
  CHECK_THROWS_AS(backward(tiles, nodes, 2, tiles.all(), partial), std::logic_error);
  CHECK_THROWS_AS(backward(tiles, nodes, 1, tiles.all(), three), std::logic_error);
  CHECK_THROWS_AS(night_pass(tiles, three, 1, tiles.all(), nodes, three, 0, partial), std::logic_error);
  CHECK_THROWS_AS(night_pass(tiles, two, 1, tiles.all(), nodes, nodes, 0, partial), std::logic_error);
  CHECK_THROWS_AS(advance_wealth(tiles, nodes, tiles.all(), nodes, three, 0, nodes), std::logic_error);
  CHECK_THROWS_AS(add_blocks(partial, {0, 3}, three), std::logic_error);
  CHECK_THROWS_AS(add_blocks(partial, {0, 1}, nodes), std::logic_error);
  CHECK_THROWS_AS(largest_step(nodes, two), std::logic_error);
  CHECK(partial == std::vector<double>(6, -1));
}

}  // namespace
}  // namespace nightweigh::numerics

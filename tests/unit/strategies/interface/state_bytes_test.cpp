#include "strategies/interface/state_bytes.h"

#include <doctest/doctest.h>

#include <cmath>
#include <limits>
#include <string>
#include <vector>

#include "strategies/digest/sha256.h"
#include "strategies/interface/choice.h"
#include "strategies/interface/saved_state.h"

namespace nightweigh::strategies {
namespace {

// The layout of state_bytes.h written by hand, byte for byte, without the code under test.
std::string little_endian(std::uint64_t value, int bytes) {
  std::string out;
  for (int i = 0; i < bytes; ++i) {
    out += static_cast<char>(value % 256);
    value /= 256;
  }
  return out;
}

StateBytes example() {
  return {3, "constant_mix", 2, std::string(32, '\x5a'), 258, {1.0, -2.5, 5e-324}};
}

TEST_CASE("state bytes: the documented layout") {
  std::string expected("NWSTATE\0", 8);
  expected += little_endian(3, 4);
  expected += little_endian(12, 4) + "constant_mix";
  expected += little_endian(2, 8);
  expected += std::string(32, '\x5a');
  expected += little_endian(258, 8);
  expected += little_endian(3, 8);
  // IEEE 754 binary64: 1.0 = 0x3FF0000000000000, -2.5 = 0xC004000000000000, the smallest subnormal = 1.
  expected +=
      little_endian(0x3FF0000000000000U, 8) + little_endian(0xC004000000000000U, 8) + little_endian(1, 8);
  expected += sha256_bytes(expected);
  CHECK(write_state(example()) == expected);
}

TEST_CASE("state bytes: what is written is read") {
  const Outcome<StateBytes> read = read_state(write_state(example()));
  REQUIRE(read);
  CHECK(read->format == 3);
  CHECK(read->rule == "constant_mix");
  CHECK(read->m == 2);
  CHECK(read->choice_digest == std::string(32, '\x5a'));
  CHECK(read->days == 258);
  CHECK(read->values == example().values);
}

TEST_CASE("state bytes: every truncation and every flipped byte is refused") {
  const std::string good = write_state(example());
  for (std::size_t length = 0; length < good.size(); ++length) {
    CAPTURE(length);
    CHECK_FALSE(read_state(std::string_view(good).substr(0, length)));
  }
  for (std::size_t at = 0; at < good.size(); ++at) {
    for (const int flip : {1, 0x80, 0xff}) {
      CAPTURE(at);
      std::string bad = good;
      bad[at] = static_cast<char>(bad[at] ^ flip);
      CHECK_FALSE(read_state(bad));
    }
  }
  CHECK_FALSE(read_state(good + '\0'));
}

// Bytes whose SHA-256 is right, but whose lengths lie: nothing may be allocated or read on their word.
TEST_CASE("state bytes: lengths that contradict the bytes at hand are refused") {
  const auto sealed = [](std::string body) { return body + sha256_bytes(body); };
  const std::string start = std::string("NWSTATE\0", 8) + little_endian(1, 4);
  const auto rest = [](std::uint64_t count, const std::string& doubles) {
    return little_endian(2, 8) + std::string(32, 'd') + little_endian(0, 8) + little_endian(count, 8) +
           doubles;
  };
  const std::uint64_t huge = std::numeric_limits<std::uint64_t>::max();
  CHECK(read_state(sealed(start + little_endian(1, 4) + "r" + rest(1, std::string(8, '\0')))));
  CHECK_FALSE(read_state(sealed(start + little_endian(0xFFFFFFFFU, 4) + "r" + rest(0, ""))));
  CHECK_FALSE(read_state(sealed(start + little_endian(1, 4) + "r" + rest(huge, std::string(8, '\0')))));
  CHECK_FALSE(
      read_state(sealed(start + little_endian(1, 4) + "r" + rest(huge / 8 + 2, std::string(8, '\0')))));
  CHECK_FALSE(read_state(sealed(start + little_endian(1, 4) + "r" + rest(0, std::string(8, '\0')))));
  CHECK_FALSE(read_state(sealed(start + little_endian(1, 4) + "r" + rest(1, std::string(9, '\0')))));
  CHECK_FALSE(read_state(sealed(start)));
  CHECK_FALSE(read_state(sealed(std::string("NWSTATE\0", 8))));
}

TEST_CASE("saved state: held against the choice") {
  const Choice mine{"exponentiated_gradient", 3, 0.05, {}};
  const std::string bytes = save_state(mine, 1, 7, {0.0, -1.0, -2.0});
  REQUIRE(load_state(mine, 1, 3, bytes));
  CHECK(load_state(mine, 1, 3, bytes)->days == 7);

  const auto problem = [&](const Choice& choice, std::uint32_t format, std::size_t count,
                           const std::string& from) {
    const Outcome<StateBytes> loaded = load_state(choice, format, count, from);
    return loaded ? std::string("taken") : loaded.error().problem;
  };
  CHECK(problem({"buy_and_hold", 3, 0.05, {}}, 1, 3, bytes) ==
        "the state is of rule exponentiated_gradient, the book runs buy_and_hold");
  CHECK(problem(mine, 2, 3, bytes) == "the state has format 1, this version reads 2");
  CHECK(problem({"exponentiated_gradient", 4, 0.05, {}}, 1, 4, bytes) == "the state has 3 lines, the book 4");
  CHECK(problem({"exponentiated_gradient", 3, 0.1, {}}, 1, 3, bytes) ==
        "the state was learned with other parameters than rule=exponentiated_gradient;m=3;eta=0.1");
  CHECK(problem(mine, 1, 4, bytes) == "the state holds 3 values where 4 belong");
  const double infinity = std::numeric_limits<double>::infinity();
  CHECK(problem(mine, 1, 3, save_state(mine, 1, 7, {0.0, infinity, -2.0})) ==
        "value 1 of the state is not finite");
  CHECK(problem(mine, 1, 3, save_state(mine, 1, 7, {std::nan(""), 0.0, -2.0})) ==
        "value 0 of the state is not finite");
}

TEST_CASE("choice: what decides the rule's behaviour decides the digest, and nothing else does") {
  const Choice gradient{"exponentiated_gradient", 3, 0.05, {}};
  CHECK(gradient.canonical_text() == "rule=exponentiated_gradient;m=3;eta=0.05");
  CHECK(gradient.digest() == sha256_bytes("rule=exponentiated_gradient;m=3;eta=0.05"));
  CHECK(gradient.digest() != Choice{"exponentiated_gradient", 3, 0.05000000000000001, {}}.digest());
  CHECK(Choice{"buy_and_hold", 3, 0.05, {}}.digest() == Choice{"buy_and_hold", 3, 0.1, {}}.digest());
  CHECK(Choice{"constant_mix", 2, 0.05, {0.25, 0.75}}.canonical_text() ==
        "rule=constant_mix;m=2;weights=0.25,0.75,");
  CHECK(Choice{"constant_mix", 2, 0.05, {0.25, 0.75}}.digest() !=
        Choice{"constant_mix", 2, 0.05, {0.75, 0.25}}.digest());
}

}  // namespace
}  // namespace nightweigh::strategies

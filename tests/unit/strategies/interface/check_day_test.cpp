#include <doctest/doctest.h>

#include <cstdint>
#include <limits>
#include <vector>

#include "strategies/interface/strategy.h"

namespace nightweigh::strategies {
namespace {

constexpr double nan = std::numeric_limits<double>::quiet_NaN();
constexpr double infinity = std::numeric_limits<double>::infinity();

bool fine(const std::vector<double>& relatives, const std::vector<std::uint8_t>& absent, std::size_t m) {
  return check_day({relatives, absent}, m).has_value();
}

TEST_CASE("a day: what can be learned") {
  CHECK(fine({1.01, 0.99}, {0, 0}, 2));
  CHECK(fine({0.0, 0.99}, {0, 0}, 2));  // a total loss of one line
  CHECK(fine({nan, 0.99}, {1, 0}, 2));  // an absent line's entry is not looked at
  CHECK(fine({nan, infinity}, {1, 1}, 2));
  CHECK(fine({-1.0, 0.99}, {255, 0}, 2));
}

TEST_CASE("a day: what is refused") {
  CHECK_FALSE(fine({1.01, 0.99}, {0, 0}, 3));
  CHECK_FALSE(fine({1.01, 0.99}, {0}, 2));
  CHECK_FALSE(fine({1.01}, {0, 0}, 2));
  CHECK_FALSE(fine({nan, 0.99}, {0, 0}, 2));
  CHECK_FALSE(fine({1.0, infinity}, {0, 0}, 2));
  CHECK_FALSE(fine({1.0, -0.0001}, {0, 0}, 2));
  CHECK_FALSE(fine({0.0, 0.0}, {0, 0}, 2));
  CHECK_FALSE(fine({0.0, 1.0}, {0, 1}, 2));  // the present lines lose everything
}

TEST_CASE("a day: the refusal names the line and its value") {
  const std::vector<double> relatives{1.0, -0.2};
  const std::vector<std::uint8_t> absent{0, 0};
  const Outcome<void> checked = check_day({relatives, absent}, 2);
  REQUIRE_FALSE(checked);
  CHECK(checked.error().problem == "the relative of line 1 is -0.200000");
  CHECK(checked.error().remedy == "price relatives are finite and not negative");
}

}  // namespace
}  // namespace nightweigh::strategies

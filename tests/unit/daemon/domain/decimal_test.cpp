#include "daemon/domain/decimal.h"

#include <doctest/doctest.h>

#include <cmath>
#include <limits>
#include <string>

namespace nightweigh {
namespace {

Decimal dec(const char* text) {
  const auto value = Decimal::parse(text, 37, 36);
  REQUIRE_MESSAGE(value.has_value(), text);
  return *value;
}

__extension__ using uint128 = unsigned __int128;
constexpr int128 int128_max = static_cast<int128>(~static_cast<uint128>(0) >> 1);
constexpr int128 int128_min = -int128_max - 1;

TEST_CASE("parse takes plain decimal text and nothing else") {
  const std::pair<const char*, const char*> good[] = {{"0", "0"},
                                                      {"-0", "0"},
                                                      {"0.0", "0"},
                                                      {"-0.00", "0"},
                                                      {"61.20", "61.2"},
                                                      {"007", "7"},
                                                      {"000.500", "0.5"},
                                                      {"-1.5", "-1.5"},
                                                      {"999999999999999999", "999999999999999999"},
                                                      {"0.0000000001", "0.0000000001"},
                                                      {"1.00000000000000000000000000000000000000000", "1"},
                                                      {"000000000000000000000000000000000000000000001", "1"}};
  for (const auto& [text, canonical] : good) {
    CAPTURE(text);
    const auto value = Decimal::parse(text);
    REQUIRE(value.has_value());
    CHECK(value->to_string() == canonical);
  }
  for (const char* text : {"",
                           "-",
                           ".",
                           "-.",
                           "1.",
                           ".5",
                           "-.5",
                           "+1",
                           "1e3",
                           "1E3",
                           " 1",
                           "1 ",
                           "1,5",
                           "1,000",
                           "1_000",
                           "0x10",
                           "inf",
                           "nan",
                           "--1",
                           "1.2.3",
                           "1-",
                           "\xd9\xa1",
                           "1\n",
                           "1000000000000000000",
                           "0.00000000001",
                           "1.00000000001"}) {
    CAPTURE(text);
    CHECK_FALSE(Decimal::parse(text).has_value());
  }
  CHECK_FALSE(Decimal::parse(std::string_view("1\0", 2)).has_value());
}

TEST_CASE("parse keeps to the limits that it is given") {
  CHECK(Decimal::parse("12345", 5, 0).has_value());
  CHECK_FALSE(Decimal::parse("123456", 5, 0).has_value());
  CHECK_FALSE(Decimal::parse("1.5", 5, 0).has_value());
  CHECK(Decimal::parse("1.50", 5, 1).has_value());
  CHECK(Decimal::parse(std::string(37, '9'), 40, 36)->to_string() == std::string(37, '9'));
  CHECK_FALSE(Decimal::parse(std::string(38, '9'), 40, 36).has_value());
  CHECK(Decimal::parse("0." + std::string(36, '9'), 40, 40)->to_string() == "0." + std::string(36, '9'));
  CHECK_FALSE(Decimal::parse("0." + std::string(37, '9'), 40, 40).has_value());
}

TEST_CASE("padded text") {
  CHECK(dec("61.2").to_string_padded(2) == "61.20");
  CHECK(dec("61").to_string_padded(2) == "61.00");
  CHECK(dec("0").to_string_padded(2) == "0.00");
  CHECK(dec("-0.5").to_string_padded(0) == "-0.5");
  CHECK(dec("0.005").to_string_padded(2) == "0.005");
  CHECK(dec("-7").to_string_padded(3) == "-7.000");
  CHECK(dec("3").to_string_padded(-1) == "3");
}

TEST_CASE("equal numbers are equal in every way") {
  CHECK(dec("61.20") == dec("61.2"));
  CHECK(dec("100").scale() == 0);
  CHECK(Decimal::scaled(1000, 3) == Decimal(1));
  CHECK(Decimal::scaled(0, 36) == Decimal());
  CHECK((dec("61.20") <=> dec("61.2")) == std::strong_ordering::equal);
}

TEST_CASE("comparison across scales, where aligning them would overflow") {
  const Decimal huge = Decimal::scaled(int128_max, 0), tiny = Decimal::scaled(1, 36);
  CHECK(tiny < huge);
  CHECK(-huge < -tiny);
  CHECK(Decimal() < tiny);
  CHECK(-tiny < Decimal());
  CHECK(Decimal::scaled(int128_min, 0) < -huge);
  CHECK(Decimal::scaled(int128_max, 36) < Decimal(171));
  CHECK(Decimal::scaled(int128_max, 36) > Decimal(170));
  CHECK(Decimal::scaled(int128_min, 36) > Decimal(-171));
  CHECK(dec("-0.5") < dec("-0.25"));
  CHECK(dec("-1.5") < dec("-1.25"));
  CHECK(dec("0.1") > dec("0.09999999999"));
}

TEST_CASE("exact sums and products") {
  // By hand: 0.1 + 0.2 is 0.3, as it is not in binary floating point.
  CHECK(dec("0.1") + dec("0.2") == dec("0.3"));
  CHECK(dec("1000000.00") - dec("0.01") == dec("999999.99"));
  CHECK(dec("1.5") * dec("-2.5") == dec("-3.75"));
  CHECK(dec("0.5") * dec("2") == Decimal(1));
  CHECK(-dec("1.25") == dec("-1.25"));
  CHECK(dec("-1.25").abs() == dec("1.25"));
  // Computed with Python 3.11's decimal module at 60 digits.
  CHECK(dec("123456789012345.678901") * dec("987654321.1234567") ==
        dec("121932631140070099876311.6379973770867"));
  CHECK(dec("99999999999999999999.99999999") + dec("0.00000001") == dec("100000000000000000000"));
}

TEST_CASE("what does not fit throws, and what fits at the edge does not") {
  const Decimal most = Decimal::scaled(int128_max, 0), least = Decimal::scaled(int128_min, 0);
  CHECK(most.to_string() == "170141183460469231731687303715884105727");
  CHECK(least.to_string() == "-170141183460469231731687303715884105728");
  CHECK_THROWS_AS(most + Decimal(1), DecimalOverflow);
  CHECK_THROWS_AS(least - Decimal(1), DecimalOverflow);
  CHECK_THROWS_AS(-least, DecimalOverflow);
  CHECK_THROWS_AS(least.abs(), DecimalOverflow);
  CHECK_THROWS_AS(most * Decimal(2), DecimalOverflow);
  CHECK_THROWS_AS(most + dec("0.1"), DecimalOverflow);
  CHECK_THROWS_AS(Decimal::scaled(1, 37), DecimalOverflow);
  CHECK_THROWS_AS(Decimal::scaled(1, -1), DecimalOverflow);
  CHECK_THROWS_AS(Decimal::scaled(1, 20) * Decimal::scaled(1, 17), DecimalOverflow);
  CHECK(most + least == Decimal(-1));
  CHECK(least - least == Decimal());
  CHECK(Decimal(-1) - least == most);
  // 5e-18 * 2e-19 is 1e-36, though the scales add up to 37.
  CHECK(Decimal::scaled(5, 18) * Decimal::scaled(2, 19) == Decimal::scaled(1, 36));
  CHECK(Decimal(std::numeric_limits<std::int64_t>::min()).to_string() == "-9223372036854775808");
}

TEST_CASE("rounding: ties go to even, down goes toward zero") {
  // The ties of IEEE 754's roundTiesToEven, in decimal.
  CHECK(dec("0.5").rounded_half_even(0) == Decimal(0));
  CHECK(dec("1.5").rounded_half_even(0) == Decimal(2));
  CHECK(dec("2.5").rounded_half_even(0) == Decimal(2));
  CHECK(dec("-0.5").rounded_half_even(0) == Decimal(0));
  CHECK(dec("-1.5").rounded_half_even(0) == Decimal(-2));
  CHECK(dec("-2.5").rounded_half_even(0) == Decimal(-2));
  CHECK(dec("2.675").rounded_half_even(2) == dec("2.68"));
  CHECK(dec("2.665").rounded_half_even(2) == dec("2.66"));
  CHECK(dec("2.5000001").rounded_half_even(0) == Decimal(3));
  CHECK(dec("0.49999999").rounded_half_even(0) == Decimal(0));
  CHECK(dec("9.99").rounded_half_even(1) == Decimal(10));
  CHECK(dec("1.25").rounded_half_even(5) == dec("1.25"));
  CHECK(dec("1.99").rounded_down(1) == dec("1.9"));
  CHECK(dec("-1.99").rounded_down(1) == dec("-1.9"));
  CHECK(dec("-0.09").rounded_down(1) == Decimal());
  CHECK(Decimal::scaled(int128_min, 36).rounded_half_even(0) == Decimal(-170));
  CHECK(Decimal::scaled(int128_max, 1).rounded_half_even(0).to_string() ==
        "17014118346046923173168730371588410573");
}

TEST_CASE("whole multiples of a unit") {
  CHECK(dec("107").floor_to_multiple(Decimal(10)) == Decimal(100));
  CHECK(dec("-107").floor_to_multiple(Decimal(10)) == Decimal(-100));
  CHECK(dec("9.999").floor_to_multiple(Decimal(10)) == Decimal());
  CHECK(dec("100").floor_to_multiple(Decimal(10)) == Decimal(100));
  CHECK(dec("1.23456789012").floor_to_multiple(Decimal::scaled(1, 8)) == dec("1.23456789"));
  CHECK(dec("0.75").floor_to_multiple(dec("0.5")) == dec("0.5"));
  // Aligning 1e35 with 1e-8 in one 128-bit number would overflow.
  const Decimal large = dec("100000000000000000000000000000000000");
  CHECK(dec("5.00000001").floor_to_multiple(large) == Decimal());
  CHECK(large.floor_to_multiple(large * dec("0.00000003")).to_string() ==
        "99999999000000000000000000000000000");
  CHECK(Decimal::scaled(int128_min, 0).floor_to_multiple(Decimal(3)).to_string() ==
        "-170141183460469231731687303715884105726");
  CHECK_THROWS_AS(dec("1").floor_to_multiple(Decimal()), std::invalid_argument);
}

TEST_CASE("a product over a divisor, with nothing lost inside") {
  CHECK(multiply_divide_down(Decimal(10), Decimal(1), Decimal(3), 4) == dec("3.3333"));
  CHECK(multiply_divide_down(Decimal(-10), Decimal(1), Decimal(3), 4) == dec("-3.3333"));
  CHECK(multiply_divide_down(Decimal(20), Decimal(1), Decimal(3), 0) == Decimal(6));
  CHECK(multiply_divide_half_even(Decimal(20), Decimal(1), Decimal(3), 0) == Decimal(7));
  CHECK(multiply_divide_half_even(Decimal(5), Decimal(1), Decimal(2), 0) == Decimal(2));
  CHECK(multiply_divide_half_even(Decimal(-7), Decimal(1), Decimal(2), 0) == Decimal(-4));
  // The inside takes 256 bits: a * a / a is a.
  const Decimal most = Decimal::scaled(int128_max, 0), least = Decimal::scaled(int128_min, 0);
  CHECK(multiply_divide_down(most, most, most, 0) == most);
  CHECK(multiply_divide_down(least, most, most, 0).to_string() == "-170141183460469231731687303715884105728");
  CHECK(multiply_divide_half_even(least, Decimal(1), Decimal(1), 0) == least);
  CHECK_THROWS_AS(multiply_divide_down(least, Decimal(-1), Decimal(1), 0), DecimalOverflow);
  CHECK_THROWS_AS(multiply_divide_down(most, Decimal(2), Decimal(1), 0), DecimalOverflow);
  CHECK(multiply_divide_down(Decimal::scaled(1, 36), Decimal::scaled(1, 36), Decimal::scaled(1, 36), 36) ==
        Decimal::scaled(1, 36));
  CHECK(multiply_divide_down(Decimal::scaled(1, 36), Decimal::scaled(1, 36), most, 36) == Decimal());
  CHECK_THROWS_AS(multiply_divide_down(Decimal(1), Decimal(1), Decimal(), 0), std::invalid_argument);
  CHECK_THROWS_AS(multiply_divide_down(Decimal(1), Decimal(1), Decimal(-1), 0), std::invalid_argument);
}

TEST_CASE("the nearest decimal to a double") {
  CHECK(Decimal::nearest(0.0, 8) == Decimal());
  CHECK(Decimal::nearest(-0.0, 8) == Decimal());
  CHECK(Decimal::nearest(0.5, 0) == Decimal(0));
  CHECK(Decimal::nearest(1.5, 0) == Decimal(2));
  CHECK(Decimal::nearest(-2.5, 0) == Decimal(-2));
  CHECK(Decimal::nearest(0.125, 2) == dec("0.12"));
  CHECK(Decimal::nearest(0.375, 2) == dec("0.38"));
  CHECK(Decimal::nearest(1234.5678, 8) == dec("1234.5678"));
  // The double nearest to 0.1 is 0.1000000000000000055511151231257827... (IEEE 754 binary64).
  CHECK(Decimal::nearest(0.1, 20) == dec("0.10000000000000000555"));
  CHECK(Decimal::nearest(1e26, 20).to_string() == "100000000000000004764729344");
  CHECK(Decimal::nearest(-1e26, 0).to_string() == "-100000000000000004764729344");
  CHECK(Decimal::nearest(9007199254740993.0 * 2, 8).to_string() == "18014398509481984");
  CHECK(Decimal::nearest(5e-21, 20) == Decimal());
  CHECK(Decimal::nearest(6e-21, 20) == Decimal::scaled(1, 20));
  CHECK(Decimal::nearest(std::numeric_limits<double>::denorm_min(), 20) == Decimal());
  for (const double bad : {1e27, -1e27, 1e300, HUGE_VAL, -HUGE_VAL, std::nan("")}) {
    CHECK_THROWS_AS(Decimal::nearest(bad, 8), DecimalOverflow);
  }
  CHECK_THROWS_AS(Decimal::nearest(1.0, 21), std::invalid_argument);
}

TEST_CASE("the nearest double to a decimal") {
  CHECK(dec("0.1").to_double() == 0.1);
  CHECK(dec("-61.2").to_double() == -61.2);
  CHECK(dec("9007199254740993").to_double() == 9007199254740992.0);  // 2^53 + 1: a tie, to even
  CHECK(Decimal::scaled(1, 36).to_double() == 1e-36);
  CHECK(Decimal::scaled(int128_max, 0).to_double() == std::ldexp(1.0, 127));
}

}  // namespace
}  // namespace nightweigh

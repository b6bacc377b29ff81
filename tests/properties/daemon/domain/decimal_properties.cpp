// Every operation of Decimal against rationals of unlimited size (Boost.Multiprecision).
#include <doctest/doctest.h>

#include <rapidcheck.h>
#include <boost/multiprecision/cpp_int.hpp>

#include <charconv>
#include <cstdlib>
#include <functional>
#include <optional>

#include "daemon/domain/decimal.h"

namespace nightweigh {
namespace {

// A hundred cases, RapidCheck's default, are few for ends of ranges; these take microseconds each.
[[maybe_unused]] const int more_cases = setenv("RC_PARAMS", "max_success=3000", 0);

__extension__ using uint128 = unsigned __int128;
using boost::multiprecision::cpp_int;
using boost::multiprecision::cpp_rational;

cpp_int power_of_ten(int exponent) {
  return boost::multiprecision::pow(cpp_int(10), static_cast<unsigned>(exponent));
}

cpp_int big(int128 value) {
  cpp_int out = static_cast<std::int64_t>(value >> 64);
  out *= boost::multiprecision::pow(cpp_int(2), 64);
  return out + static_cast<std::uint64_t>(value);
}

cpp_rational exact(const Decimal& value) {
  return cpp_rational(big(value.coefficient()), power_of_ten(value.scale()));
}

// Coefficients of all magnitudes, the ends of the range among them, and all scales.
rc::Gen<Decimal> decimals() {
  return rc::gen::exec([] {
    const auto high = static_cast<uint128>(*rc::gen::arbitrary<std::uint64_t>());
    const auto low = static_cast<uint128>(*rc::gen::arbitrary<std::uint64_t>());
    const int bits = *rc::gen::inRange(1, 129);
    const auto whole = static_cast<int128>(high * 0x9E3779B97F4A7C15U << 64 ^ low * 0xD1B54A32D192ED03U);
    const int128 coefficient = *rc::gen::weightedElement<int>({{9, 0}, {1, 1}}) == 0 || bits > 127
                                   ? whole >> (128 - bits)
                                   : (whole < 0 ? -1 : 1) * ((int128{1} << (bits - 1)) - 1);
    return Decimal::scaled(coefficient, *rc::gen::inRange(0, 37));
  });
}

rc::Gen<Decimal> positive_decimals() {
  return rc::gen::suchThat(decimals(), [](const Decimal& value) { return value.is_positive(); });
}

// The value, or nothing where it threw for lack of room.
std::optional<Decimal> result(const std::function<Decimal()>& compute) {
  try {
    return compute();
  } catch (const DecimalOverflow&) {
    return std::nullopt;
  }
}

// Whether a Decimal can hold it: at most 36 places, and a coefficient of 128 bits.
bool fits(const cpp_rational& value) {
  const cpp_int limit = boost::multiprecision::pow(cpp_int(2), 127);
  for (int scale = 0; scale <= 36; ++scale) {
    const cpp_rational coefficient = value * cpp_rational(power_of_ten(scale));
    if (denominator(coefficient) == 1)
      return numerator(coefficient) < limit && numerator(coefficient) >= -limit;
  }
  return false;
}

cpp_int truncated(const cpp_rational& value) {
  return numerator(value) / denominator(value);
}

cpp_int half_even(const cpp_rational& value) {
  const cpp_int down = truncated(value);
  const cpp_rational rest = abs(cpp_rational(value - cpp_rational(down)));
  const cpp_rational half(1, 2);
  const bool away = rest > half || (rest == half && down % 2 != 0);
  if (!away) return down;
  return value < 0 ? cpp_int(down - 1) : cpp_int(down + 1);
}

TEST_CASE("sums, differences and products are exact, or throw") {
  CHECK(rc::check("sum, difference, product", [] {
    const Decimal a = *decimals(), b = *decimals();
    const auto sum = result([&] { return a + b; });
    if (sum) RC_ASSERT(exact(*sum) == exact(a) + exact(b));
    const auto difference = result([&] { return a - b; });
    if (difference) RC_ASSERT(exact(*difference) == exact(a) - exact(b));
    const auto product = result([&] { return a * b; });
    if (product) RC_ASSERT(exact(*product) == exact(a) * exact(b));
    RC_TAG(sum.has_value(), product.has_value());
  }));
}

TEST_CASE("numbers of money's size never throw") {
  CHECK(rc::check("15 digits before and 10 after the point", [] {
    const auto money = rc::gen::map(rc::gen::inRange<std::int64_t>(-999'999'999'999'999, 999'999'999'999'999),
                                    [](std::int64_t value) { return Decimal(value); });
    const auto cents = rc::gen::map(rc::gen::inRange<std::int64_t>(-9'999'999'999, 9'999'999'999),
                                    [](std::int64_t value) { return Decimal::scaled(value, 10); });
    const Decimal a = *money + *cents, b = *money + *cents;
    RC_ASSERT(exact(a + b) == exact(a) + exact(b));
    RC_ASSERT(exact(a - b) == exact(a) - exact(b));
    const Decimal price = Decimal::scaled(*rc::gen::inRange<std::int64_t>(1, 999'999'999'999), 6);
    RC_ASSERT(exact(a.rounded_down(8) * price) == exact(a.rounded_down(8)) * exact(price));
  }));
}

TEST_CASE("order is that of the numbers") {
  CHECK(rc::check("order", [] {
    const Decimal a = *decimals();
    const Decimal b = *rc::gen::oneOf(decimals(), rc::gen::just(a));
    RC_ASSERT((a < b) == (exact(a) < exact(b)));
    RC_ASSERT((a == b) == (exact(a) == exact(b)));
    RC_ASSERT((a <=> b == std::strong_ordering::equal) == (a == b));
  }));
}

TEST_CASE("text and back") {
  CHECK(rc::check("text", [] {
    const Decimal a = *decimals();
    const auto back = Decimal::parse(a.to_string(), 37, 36);
    if (a.abs() < Decimal::scaled(1, 0) || a.to_string().size() <= 37) {
      RC_ASSERT(back.has_value());
      RC_ASSERT(*back == a);
    }
    RC_ASSERT(!a.to_string().ends_with("."));
    if (a.scale() > 0) RC_ASSERT(a.coefficient() % 10 != 0);
    double oracle = 0;
    const std::string text = a.to_string();
    std::from_chars(text.data(), text.data() + text.size(), oracle);
    RC_ASSERT(a.to_double() == oracle);
  }));
}

TEST_CASE("rounding") {
  CHECK(rc::check("rounding", [] {
    const Decimal a = *decimals();
    const int scale = *rc::gen::inRange(0, 37);
    const cpp_rational shifted = exact(a) * cpp_rational(power_of_ten(scale));
    RC_ASSERT(exact(a.rounded_down(scale)) == cpp_rational(truncated(shifted), power_of_ten(scale)));
    RC_ASSERT(exact(a.rounded_half_even(scale)) == cpp_rational(half_even(shifted), power_of_ten(scale)));
  }));
}

TEST_CASE("products over divisors are exact inside, and throw only where the result does not fit") {
  CHECK(rc::check("multiply, divide", [] {
    const Decimal a = *decimals(), numerator_of = *decimals(), divisor = *positive_decimals();
    const int scale = *rc::gen::inRange(0, 37);
    const cpp_rational quotient =
        exact(a) * exact(numerator_of) / exact(divisor) * cpp_rational(power_of_ten(scale));
    const cpp_int limit = boost::multiprecision::pow(cpp_int(2), 127);
    const auto down = result([&] { return multiply_divide_down(a, numerator_of, divisor, scale); });
    const cpp_int down_oracle = truncated(quotient);
    if (down) RC_ASSERT(exact(*down) == cpp_rational(down_oracle, power_of_ten(scale)));
    if (abs(down_oracle) < limit) RC_ASSERT(down.has_value());
    const auto nearest = result([&] { return multiply_divide_half_even(a, numerator_of, divisor, scale); });
    const cpp_int nearest_oracle = half_even(quotient);
    if (nearest) RC_ASSERT(exact(*nearest) == cpp_rational(nearest_oracle, power_of_ten(scale)));
    if (abs(nearest_oracle) < limit) RC_ASSERT(nearest.has_value());
    RC_TAG(down.has_value());
  }));
}

TEST_CASE("whole multiples") {
  CHECK(rc::check("floor_to_multiple", [] {
    const Decimal a = *decimals(), unit = *positive_decimals();
    const cpp_int times = truncated(exact(a) / exact(unit));
    const auto multiple = result([&] { return a.floor_to_multiple(unit); });
    if (multiple) RC_ASSERT(exact(*multiple) == cpp_rational(times) * exact(unit));
    if (!multiple)
      RC_ASSERT(abs(times) >= boost::multiprecision::pow(cpp_int(2), 127) ||
                !fits(cpp_rational(times) * exact(unit)) ||
                abs(times * big(unit.coefficient())) >= boost::multiprecision::pow(cpp_int(2), 127));
  }));
}

TEST_CASE("the decimal nearest to a double") {
  CHECK(rc::check("nearest", [] {
    const double mantissa = static_cast<double>(*rc::gen::arbitrary<std::int64_t>()) * 0x1p-40;
    const double value = std::ldexp(mantissa, *rc::gen::inRange(-120, 64));
    const int scale = *rc::gen::inRange(0, 21);
    RC_PRE(std::abs(value) < 1e27);
    int exponent = 0;
    const cpp_int whole(static_cast<std::int64_t>(std::ldexp(std::frexp(value, &exponent), 53)));
    exponent -= 53;
    const cpp_int power = boost::multiprecision::pow(cpp_int(2), static_cast<unsigned>(std::abs(exponent)));
    const cpp_rational oracle = exponent >= 0 ? cpp_rational(whole * power) : cpp_rational(whole, power);
    RC_ASSERT(exact(Decimal::nearest(value, scale)) ==
              cpp_rational(half_even(oracle * cpp_rational(power_of_ten(scale))), power_of_ten(scale)));
  }));
}

}  // namespace
}  // namespace nightweigh

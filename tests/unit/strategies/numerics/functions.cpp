// Accuracy of log, exp and cbrt, their special values, and the reductions against exact sums.
#include <doctest/doctest.h>

#include <cmath>
#include <cstdio>
#include <functional>
#include <limits>
#include <stdexcept>

#include "tests/unit/strategies/numerics/support.h"

namespace nightweigh::numerics {
namespace {

using testing::Random;

static_assert(std::numeric_limits<long double>::digits >= 64, "the reference needs more digits than double");

constexpr double infinity = std::numeric_limits<double>::infinity();

// Error of `is` in units of the last place of the true value (of the smallest subnormal below them).
double ulp_error(double is, long double truth) {
  const int exponent = truth == 0 ? -1022 : std::max(std::ilogb(truth), -1022);
  return static_cast<double>(
      std::fabs((static_cast<long double>(is) - truth) / std::ldexp(1.0L, exponent - 52)));
}

struct Worst {
  double error = 0;
  double at = 0;
};

Worst worst_of(int count, const std::function<double()>& draw, double (*function)(double),
               long double (*reference)(long double)) {
  Worst worst;
  for (int k = 0; k < count; ++k) {
    const double x = draw();
    const double error = ulp_error(function(x), reference(x));
    if (!(error <= worst.error)) worst = {error, x};
  }
  return worst;
}

void report(const char* function, const char* range, Worst worst) {
  std::printf("  %-5s %-22s %.4f ulp at %.17g\n", function, range, worst.error, worst.at);
}

// The reference is the C library's long double function (64-bit mantissa, so good to about 1/1000 ulp).
TEST_CASE("log: below 0.7 ulp everywhere, also near 1 and for subnormals") {
  Random random(1);
  const auto any_bits = [&] {
    return std::bit_cast<double>(random.next() % std::bit_cast<std::uint64_t>(infinity));
  };
  const auto subnormal = [&] { return std::bit_cast<double>(1 + random.next() % ((1ULL << 52) - 1)); };
  const auto near_one = [&] {
    const double size = std::ldexp(1 + random.uniform(), -1 - static_cast<int>(random.next() % 52));
    return random.next() % 2 == 0 ? 1 + size : 1 - size / 2;
  };
  const auto relative = [&] { return random.between(0.99, 1.01); };
  const auto octaves = [&] { return random.between(0.25, 4); };
  const auto root_half = [&] {
    return std::ldexp(random.between(0.7, 0.715), static_cast<int>(random.next() % 3));
  };
  const struct {
    const char* range;
    std::function<double()> draw;
  } ranges[] = {{"all positive bits", any_bits}, {"subnormal", subnormal},
                {"1 +- 2^-j", near_one},         {"0.99 to 1.01", relative},
                {"1/4 to 4", octaves},           {"about sqrt(1/2) 2^j", root_half}};
  for (const auto& each : ranges) {
    const char* range = each.range;
    const Worst worst = worst_of(200'000, each.draw, log, std::log);
    report("log", range, worst);
    CHECK_MESSAGE(worst.error < 0.7, range << " at " << worst.at);
  }
}

TEST_CASE("exp: below 0.7 ulp, below 0.9 where the result is subnormal") {
  Random random(2);
  const struct {
    const char* range;
    double low, high, limit;
  } ranges[] = {{"-708 to 709.78", -708, 709.78, 0.7},
                {"-1 to 1", -1, 1, 0.7},
                {"about 0", -1e-5, 1e-5, 0.7},
                {"around ln2/2", 0.33, 0.36, 0.7},
                {"subnormal", -745.1, -708.4, 0.9}};
  for (const auto& range : ranges) {
    const Worst worst = worst_of(
        200'000, [&] { return random.between(range.low, range.high); }, exp, std::exp);
    report("exp", range.range, worst);
    CHECK_MESSAGE(worst.error < range.limit, range.range << " at " << worst.at);
  }
}

TEST_CASE("cbrt: below 0.7 ulp") {
  Random random(3);
  const auto any_bits = [&] {
    const double x = std::bit_cast<double>(random.next());
    return std::isfinite(x) ? x : 1.0;
  };
  const auto octaves = [&] { return random.between(0.1, 10); };
  const auto subnormal = [&] { return std::bit_cast<double>(1 + random.next() % ((1ULL << 52) - 1)); };
  const Worst all = worst_of(200'000, any_bits, cbrt, std::cbrt);
  const Worst small = worst_of(200'000, octaves, cbrt, std::cbrt);
  const Worst tiny = worst_of(100'000, subnormal, cbrt, std::cbrt);
  report("cbrt", "all bits", all);
  report("cbrt", "0.1 to 10", small);
  report("cbrt", "subnormal", tiny);
  CHECK(all.error < 0.7);
  CHECK(small.error < 0.7);
  CHECK(tiny.error < 0.7);
  for (int k = -1000; k <= 1000; ++k) CHECK(cbrt(static_cast<double>(k) * k * k) == k);
}

// Digits: OEIS A002162 (ln 2), A002392 (ln 10), A001113 (e), A068985 (1/e), A002580 (cube root of 2); from
// memory, and agreeing with the C library's long double functions above.
TEST_CASE("known constants") {
  CHECK(log(2.0) == 0.693147180559945309417232121458);
  CHECK(log(10.0) == 2.302585092994045684017991454684);
  CHECK(exp(1.0) == 2.718281828459045235360287471353);
  CHECK(exp(-1.0) == 0.367879441171442321595523770161);
  CHECK(cbrt(2.0) == 1.259921049894873164767210607278);
}

// IEC 60559 (IEEE 754-2019, section 9.2.1) special values, on every level.
TEST_CASE("special values") {
  const testing::KeepLevel keep;
  const double nan = std::numeric_limits<double>::quiet_NaN();
  for (Level each : levels_here()) {
    CAPTURE(name_of(each));
    REQUIRE(force_level(each));
    CHECK(std::bit_cast<std::uint64_t>(log(1.0)) == 0);
    CHECK(log(0.0) == -infinity);
    CHECK(log(-0.0) == -infinity);
    CHECK(log(infinity) == infinity);
    for (double bad : {-1.0, -infinity, -5e-324, -1e300, nan, -nan}) {
      CHECK(std::bit_cast<std::uint64_t>(log(bad)) == 0x7ff8000000000000);
    }
    CHECK(log(5e-324) == doctest::Approx(-744.4400719213812).epsilon(1e-15));
    CHECK(log(std::numeric_limits<double>::max()) == doctest::Approx(709.782712893384).epsilon(1e-15));

    CHECK(exp(0.0) == 1);
    CHECK(exp(-0.0) == 1);
    CHECK(exp(infinity) == infinity);
    CHECK(std::bit_cast<std::uint64_t>(exp(-infinity)) == 0);
    CHECK(std::bit_cast<std::uint64_t>(exp(nan)) == 0x7ff8000000000000);
    CHECK(std::bit_cast<std::uint64_t>(exp(-nan)) == 0x7ff8000000000000);
    CHECK(std::isfinite(exp(0x1.62e42fefa39efp+9)));  // the largest with a finite exponential
    CHECK(exp(0x1.62e42fefa39fp+9) == infinity);
    CHECK(exp(1e300) == infinity);
    CHECK(exp(-745.13) == 5e-324);
    CHECK(exp(-745.14) == 0);
    CHECK(exp(-1e300) == 0);
    CHECK(exp(5e-324) == 1);

    CHECK(std::signbit(cbrt(-0.0)));
    CHECK(cbrt(0.0) == 0);
    CHECK(cbrt(infinity) == infinity);
    CHECK(cbrt(-infinity) == -infinity);
    CHECK(std::isnan(cbrt(nan)));
    CHECK(cbrt(-27.0) == -3);
  }
}

TEST_CASE("arrays give the bits of single calls, in place too, and agree with the C library") {
  const testing::KeepLevel keep;
  Random random(4);
  for (Level each : levels_here()) {
    CAPTURE(name_of(each));
    REQUIRE(force_level(each));
    for (std::size_t size : {0, 1, 2, 3, 7, 8, 9, 31, 200}) {
      std::vector<double> x(size), logs(size), exps(size);
      for (double& value : x) value = random.between(0, 3);
      log(x, logs);
      exp(x, exps);
      std::vector<double> in_place = x;
      exp(in_place, in_place);
      CHECK(testing::same_bits(in_place, exps));
      for (std::size_t k = 0; k < size; ++k) {
        CHECK(std::bit_cast<std::uint64_t>(log(x[k])) == std::bit_cast<std::uint64_t>(logs[k]));
        CHECK(std::bit_cast<std::uint64_t>(exp(x[k])) == std::bit_cast<std::uint64_t>(exps[k]));
        CHECK(logs[k] == doctest::Approx(std::log(x[k])).epsilon(1e-15));
        CHECK(exps[k] == doctest::Approx(std::exp(x[k])).epsilon(1e-15));
      }
    }
  }
}

// Rule N2 written down literally.
double literal_dot(std::span<const double> a, std::span<const double> b) {
  double total = 0;
  for (std::size_t block = 0; block < a.size(); block += 512) {
    double l[8] = {};
    for (std::size_t k = block; k < a.size() && k < block + 512; ++k) l[k % 8] += a[k] * b[k];
    total += ((l[0] + l[4]) + (l[2] + l[6])) + ((l[1] + l[5]) + (l[3] + l[7]));
  }
  return total;
}

TEST_CASE("sum and dot keep rule N2 to the bit, and are exact on whole numbers") {
  const testing::KeepLevel keep;
  Random random(5);
  for (std::size_t size : {0, 1, 5, 8, 9, 511, 512, 513, 1024, 5000}) {
    std::vector<double> a(size), b(size), whole_a(size), whole_b(size);
    const std::vector<double> ones(size, 1.0);
    std::int64_t exact_sum = 0, exact_dot = 0;
    for (std::size_t k = 0; k < size; ++k) {
      a[k] = random.between(-1, 1);
      b[k] = random.between(-1, 1);
      const auto i = static_cast<std::int64_t>(random.next() % 2001) - 1000;
      const auto j = static_cast<std::int64_t>(random.next() % 2001) - 1000;
      whole_a[k] = static_cast<double>(i);
      whole_b[k] = static_cast<double>(j);
      exact_sum += i;
      exact_dot += i * j;
    }
    for (Level each : levels_here()) {
      CAPTURE(name_of(each));
      REQUIRE(force_level(each));
      CHECK(sum(whole_a) == static_cast<double>(exact_sum));
      CHECK(dot(whole_a, whole_b) == static_cast<double>(exact_dot));
      CHECK(dot(a, b) == literal_dot(a, b));
      CHECK(sum(a) == literal_dot(a, ones));
    }
  }
  const std::vector<double> negative_zeros(11, -0.0);
  CHECK_FALSE(std::signbit(sum(negative_zeros)));
  CHECK_FALSE(std::signbit(sum({})));
}

TEST_CASE("sizes that differ are a logic error") {
  std::vector<double> three(3, 1.0), four(4, 1.0);
  CHECK_THROWS_AS(dot(three, four), std::logic_error);
  CHECK_THROWS_AS(log(three, four), std::logic_error);
  CHECK_THROWS_AS(exp(four, three), std::logic_error);
}

}  // namespace
}  // namespace nightweigh::numerics

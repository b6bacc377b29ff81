#include "daemon/domain/decimal.h"

#include <algorithm>
#include <array>
#include <charconv>
#include <cmath>
#include <stdexcept>

namespace nightweigh {

namespace {

constexpr int max_scale_kept = 36;

int128 checked_add(int128 a, int128 b) {
  int128 sum = 0;
  if (__builtin_add_overflow(a, b, &sum)) throw DecimalOverflow("sum of more than 38 digits");
  return sum;
}

int128 checked_multiply(int128 a, int128 b) {
  int128 product = 0;
  if (__builtin_mul_overflow(a, b, &product)) throw DecimalOverflow("product of more than 38 digits");
  return product;
}

int128 power_of_ten(int exponent) {
  int128 power = 1;
  for (int i = 0; i < exponent; ++i) power = checked_multiply(power, 10);
  return power;
}

// Round to even on ties, for a quotient with a positive divisor.
int128 divide_half_even(int128 value, int128 divisor) {
  int128 quotient = value / divisor;
  const int128 remainder = value % divisor;
  const int128 magnitude = remainder < 0 ? -remainder : remainder;
  const int128 rest = divisor - magnitude;  // compares 2*magnitude with divisor without overflow
  const bool away = magnitude > rest || (magnitude == rest && quotient % 2 != 0);
  if (away) quotient += value < 0 ? -1 : 1;
  return quotient;
}

// Digits of |value|, most significant first.
std::string digits_of(int128 value) {
  std::string text;
  do {
    const int digit = static_cast<int>(value % 10);
    text += static_cast<char>('0' + (digit < 0 ? -digit : digit));
    value /= 10;
  } while (value != 0);
  std::reverse(text.begin(), text.end());
  return text;
}

__extension__ using uint128 = unsigned __int128;

uint128 magnitude_of(int128 value) {
  return value < 0 ? uint128{0} - static_cast<uint128>(value) : static_cast<uint128>(value);
}

// An unsigned whole number of 512 bits, for the inside of multiply_divide_down: two 127-bit numbers times
// a power of ten up to 10^72 need at most 494. Plain bit by bit division; it is rarely needed.
class Wide {
 public:
  Wide() = default;
  explicit Wide(uint128 value) {
    for (std::size_t i = 0; i < 4; ++i) limbs_[i] = static_cast<std::uint32_t>(value >> (32 * i));
  }

  void multiply(uint128 factor) {
    const Wide other(factor);
    std::array<std::uint32_t, size> product{};
    for (std::size_t i = 0; i < 4; ++i) {
      std::uint64_t carry = 0;
      for (std::size_t j = 0; i + j < size; ++j) {
        carry += product[i + j] + static_cast<std::uint64_t>(other.limbs_[i]) * limbs_[j];
        product[i + j] = static_cast<std::uint32_t>(carry);
        carry >>= 32;
      }
    }
    limbs_ = product;
  }

  // Down, or to the nearest with ties to even; divisor > 0 and below 2^511.
  Wide divided_by(const Wide& divisor, bool half_even) const {
    Wide quotient, rest;
    for (std::size_t bit = size * 32; bit-- > 0;) {
      rest.shift_in((limbs_[bit / 32] >> (bit % 32)) & 1U);
      if (rest.at_least(divisor)) {
        rest.subtract(divisor);
        quotient.limbs_[bit / 32] |= std::uint32_t{1} << (bit % 32);
      }
    }
    if (half_even) {
      rest.shift_in(0);
      const bool tie = rest.limbs_ == divisor.limbs_;
      if (tie ? (quotient.limbs_[0] & 1U) != 0 : rest.at_least(divisor)) quotient.increment();
    }
    return quotient;
  }

  // This number with the sign; nullopt where it does not fit. The negative side reaches one further.
  std::optional<int128> to_int128(bool negative) const {
    uint128 value = 0;
    for (std::size_t i = size; i-- > 0;) {
      if (i >= 4 && limbs_[i] != 0) return std::nullopt;
      if (i < 4) value = (value << 32) | limbs_[i];
    }
    const uint128 most = (uint128{1} << 127) - (negative ? 0 : 1);
    if (value > most) return std::nullopt;
    return static_cast<int128>(negative ? uint128{0} - value : value);
  }

 private:
  static constexpr std::size_t size = 16;

  void shift_in(std::uint32_t bit) {
    for (auto& limb : limbs_) {
      const std::uint32_t out = limb >> 31;
      limb = (limb << 1) | bit;
      bit = out;
    }
  }
  void increment() {
    for (auto& limb : limbs_) {
      if (++limb != 0) return;
    }
  }
  bool at_least(const Wide& other) const {
    return !std::lexicographical_compare(limbs_.rbegin(), limbs_.rend(), other.limbs_.rbegin(),
                                         other.limbs_.rend());
  }
  void subtract(const Wide& other) {
    std::uint64_t borrow = 0;
    for (std::size_t i = 0; i < size; ++i) {
      const std::uint64_t taken = other.limbs_[i] + borrow;
      borrow = limbs_[i] < taken ? 1 : 0;
      limbs_[i] = static_cast<std::uint32_t>(limbs_[i] - taken);
    }
  }

  std::array<std::uint32_t, size> limbs_{};  // least significant first
};

}  // namespace

Decimal::Decimal(std::int64_t whole) : coefficient_(whole) {}

Decimal Decimal::scaled(int128 coefficient, int scale) {
  if (scale < 0 || scale > max_scale_kept) throw DecimalOverflow("more than 36 digits after the point");
  return reduced(coefficient, scale);
}

Decimal Decimal::reduced(int128 coefficient, int scale) {
  if (coefficient == 0) scale = 0;
  while (scale > 0 && coefficient % 10 == 0) {
    coefficient /= 10;
    --scale;
  }
  if (scale > max_scale_kept) throw DecimalOverflow("more than 36 digits after the point");
  Decimal out;
  out.coefficient_ = coefficient;
  out.scale_ = scale;
  return out;
}

std::optional<Decimal> Decimal::parse(std::string_view text, int max_integer_digits, int max_scale) {
  const bool negative = !text.empty() && text.front() == '-';
  if (negative) text.remove_prefix(1);
  const auto all_digits = [](std::string_view part) {
    return !part.empty() &&
           std::all_of(part.begin(), part.end(), [](char c) { return c >= '0' && c <= '9'; });
  };
  const std::size_t point = text.find('.');
  std::string_view whole = text.substr(0, point);
  std::string_view fraction = point == std::string_view::npos ? std::string_view{} : text.substr(point + 1);
  if (!all_digits(whole)) return std::nullopt;
  if (point != std::string_view::npos && !all_digits(fraction)) return std::nullopt;
  while (whole.size() > 1 && whole.front() == '0') whole.remove_prefix(1);
  while (!fraction.empty() && fraction.back() == '0') fraction.remove_suffix(1);
  if (static_cast<int>(whole.size()) > max_integer_digits || static_cast<int>(fraction.size()) > max_scale ||
      whole.size() + fraction.size() > 37) {
    return std::nullopt;
  }
  int128 coefficient = 0;
  for (const char c : whole) coefficient = coefficient * 10 + (c - '0');
  for (const char c : fraction) coefficient = coefficient * 10 + (c - '0');
  return scaled(negative ? -coefficient : coefficient, static_cast<int>(fraction.size()));
}

std::string Decimal::to_string() const {
  return to_string_padded(0);
}

std::string Decimal::to_string_padded(int scale) const {
  std::string text = digits_of(coefficient_);
  const auto places = static_cast<std::size_t>(scale_);
  if (text.size() <= places) text.insert(0, places + 1 - text.size(), '0');
  const std::size_t shown_places =
      std::max<std::size_t>(places, static_cast<std::size_t>(std::max(scale, 0)));
  if (shown_places > 0) {
    text.insert(text.size() - places, 1, '.');
    text.append(shown_places - places, '0');
  }
  if (is_negative()) text.insert(0, 1, '-');
  return text;
}

double Decimal::to_double() const {
  const std::string text = to_string();
  double value = 0;
  std::from_chars(text.data(), text.data() + text.size(), value);
  return value;
}

Decimal Decimal::nearest(double value, int scale) {
  if (!(std::abs(value) < 1e27)) throw DecimalOverflow("a wanted quantity beyond 1e27");
  if (scale < 0 || scale > 20) throw std::invalid_argument("Decimal::nearest takes scales 0 to 20");
  // Exact: a double is a whole number times a power of two.
  int exponent = 0;
  const double mantissa = std::frexp(value, &exponent);
  const auto whole = static_cast<int128>(static_cast<std::int64_t>(std::ldexp(mantissa, 53)));
  exponent -= 53;
  if (exponent >= 0) return scaled(checked_multiply(whole, int128{1} << exponent), 0);
  // Below 2^53 * 10^20 < 2^120, so that with a divisor beyond 2^120 the quotient is less than one half.
  if (exponent < -120) return Decimal();
  return scaled(divide_half_even(checked_multiply(whole, power_of_ten(scale)), int128{1} << -exponent),
                scale);
}

Decimal Decimal::operator-() const {
  return scaled(checked_multiply(coefficient_, -1), scale_);
}

Decimal operator+(const Decimal& a, const Decimal& b) {
  const int scale = std::max(a.scale_, b.scale_);
  return Decimal::scaled(checked_add(checked_multiply(a.coefficient_, power_of_ten(scale - a.scale_)),
                                     checked_multiply(b.coefficient_, power_of_ten(scale - b.scale_))),
                         scale);
}

Decimal operator-(const Decimal& a, const Decimal& b) {
  const int scale = std::max(a.scale_, b.scale_);
  int128 difference = 0;
  if (__builtin_sub_overflow(checked_multiply(a.coefficient_, power_of_ten(scale - a.scale_)),
                             checked_multiply(b.coefficient_, power_of_ten(scale - b.scale_)), &difference)) {
    throw DecimalOverflow("difference of more than 38 digits");
  }
  return Decimal::scaled(difference, scale);
}

Decimal operator*(const Decimal& a, const Decimal& b) {
  return Decimal::reduced(checked_multiply(a.coefficient_, b.coefficient_), a.scale_ + b.scale_);
}

std::strong_ordering operator<=>(const Decimal& a, const Decimal& b) {
  // Whole parts first: aligning the scales of two far-apart numbers could overflow.
  const int128 unit_a = power_of_ten(a.scale_), unit_b = power_of_ten(b.scale_);
  const int128 whole_a = a.coefficient_ / unit_a, whole_b = b.coefficient_ / unit_b;
  if (whole_a != whole_b)
    return whole_a < whole_b ? std::strong_ordering::less : std::strong_ordering::greater;
  const int scale = std::max(a.scale_, b.scale_);
  const int128 rest_a = (a.coefficient_ % unit_a) * power_of_ten(scale - a.scale_);
  const int128 rest_b = (b.coefficient_ % unit_b) * power_of_ten(scale - b.scale_);
  if (rest_a == rest_b) return std::strong_ordering::equal;
  return rest_a < rest_b ? std::strong_ordering::less : std::strong_ordering::greater;
}

Decimal Decimal::rounded_half_even(int scale) const {
  if (scale_ <= scale) return *this;
  return scaled(divide_half_even(coefficient_, power_of_ten(scale_ - scale)), scale);
}

Decimal Decimal::rounded_down(int scale) const {
  if (scale_ <= scale) return *this;
  return scaled(coefficient_ / power_of_ten(scale_ - scale), scale);
}

Decimal Decimal::rounded_floor(int scale) const {
  const Decimal down = rounded_down(scale);
  return *this < down ? down - scaled(1, scale) : down;
}

Decimal Decimal::floor_to_multiple(const Decimal& unit) const {
  return multiply_divide_down(*this, Decimal(1), unit, 0) * unit;
}

namespace {

enum class Rounding { down, half_even };

// Both sides become whole numbers first: the quotient counts units of 10^-scale.
Decimal multiply_divide(const Decimal& a, const Decimal& numerator, const Decimal& denominator, int scale,
                        Rounding rounding) {
  if (!denominator.is_positive()) throw std::invalid_argument("multiply_divide needs a denominator > 0");
  if (scale < 0 || scale > max_scale_kept) throw DecimalOverflow("more than 36 digits after the point");
  const int shift = scale + denominator.scale() - a.scale() - numerator.scale();
  int128 above = 0;
  if (shift >= 0 && shift <= max_scale_kept &&
      !__builtin_mul_overflow(a.coefficient(), numerator.coefficient(), &above) &&
      !__builtin_mul_overflow(above, power_of_ten(shift), &above)) {
    const int128 below = denominator.coefficient();
    return Decimal::scaled(rounding == Rounding::down ? above / below : divide_half_even(above, below),
                           scale);
  }
  Wide dividend(magnitude_of(a.coefficient())), divisor(magnitude_of(denominator.coefficient()));
  dividend.multiply(magnitude_of(numerator.coefficient()));
  for (int i = 0; i < std::abs(shift); ++i) (shift > 0 ? dividend : divisor).multiply(10);
  const bool negative = a.is_negative() != numerator.is_negative();
  const auto quotient = dividend.divided_by(divisor, rounding == Rounding::half_even).to_int128(negative);
  if (!quotient) throw DecimalOverflow("quotient of more than 38 digits");
  return Decimal::scaled(*quotient, scale);
}

}  // namespace

Decimal multiply_divide_down(const Decimal& a, const Decimal& numerator, const Decimal& denominator,
                             int scale) {
  return multiply_divide(a, numerator, denominator, scale, Rounding::down);
}

Decimal multiply_divide_half_even(const Decimal& a, const Decimal& numerator, const Decimal& denominator,
                                  int scale) {
  return multiply_divide(a, numerator, denominator, scale, Rounding::half_even);
}

}  // namespace nightweigh

#include "daemon/domain/decimal.h"

#include <algorithm>
#include <charconv>
#include <cmath>

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

}  // namespace

Decimal::Decimal(std::int64_t whole) : coefficient_(whole) {}

Decimal Decimal::scaled(int128 coefficient, int scale) {
  if (scale < 0 || scale > max_scale_kept) throw DecimalOverflow("more than 36 digits after the point");
  Decimal out;
  out.coefficient_ = coefficient;
  out.scale_ = scale;
  out.normalise();
  return out;
}

void Decimal::normalise() {
  if (coefficient_ == 0) scale_ = 0;
  while (scale_ > 0 && coefficient_ % 10 == 0) {
    coefficient_ /= 10;
    --scale_;
  }
}

std::optional<Decimal> Decimal::parse(std::string_view text, int max_integer_digits, int max_scale) {
  const bool negative = !text.empty() && text.front() == '-';
  if (negative) text.remove_prefix(1);
  const auto all_digits = [](std::string_view part) {
    return !part.empty() && std::all_of(part.begin(), part.end(), [](char c) { return c >= '0' && c <= '9'; });
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

std::string Decimal::to_string() const { return to_string_padded(0); }

std::string Decimal::to_string_padded(int scale) const {
  std::string text = digits_of(coefficient_);
  const auto places = static_cast<std::size_t>(scale_);
  if (text.size() <= places) text.insert(0, places + 1 - text.size(), '0');
  const std::size_t shown_places = std::max<std::size_t>(places, static_cast<std::size_t>(std::max(scale, 0)));
  if (shown_places > 0) {
    text.insert(text.size() - places, ".");
    text.append(shown_places - places, '0');
  }
  return is_negative() ? "-" + text : text;
}

double Decimal::to_double() const {
  const std::string text = to_string();
  double value = 0;
  std::from_chars(text.data(), text.data() + text.size(), value);
  return value;
}

Decimal Decimal::nearest(double value, int scale) {
  if (!(std::abs(value) < 1e27)) throw DecimalOverflow("a wanted quantity beyond 1e27");
  // Exact: a double is a whole number times a power of two.
  int exponent = 0;
  const double mantissa = std::frexp(value, &exponent);
  auto whole = static_cast<int128>(static_cast<std::int64_t>(std::ldexp(mantissa, 53)));
  exponent -= 53;
  int128 scaled_value = checked_multiply(whole, power_of_ten(std::min(scale, 20)));
  if (exponent >= 0) return scaled(checked_multiply(scaled_value, int128{1} << std::min(exponent, 120)), scale);
  if (exponent < -120) return Decimal();
  return scaled(divide_half_even(scaled_value, int128{1} << -exponent), scale);
}

Decimal Decimal::operator-() const { return scaled(checked_multiply(coefficient_, -1), scale_); }

Decimal operator+(const Decimal& a, const Decimal& b) {
  const int scale = std::max(a.scale_, b.scale_);
  return Decimal::scaled(checked_add(checked_multiply(a.coefficient_, power_of_ten(scale - a.scale_)),
                                     checked_multiply(b.coefficient_, power_of_ten(scale - b.scale_))),
                         scale);
}

Decimal operator-(const Decimal& a, const Decimal& b) { return a + -b; }

Decimal operator*(const Decimal& a, const Decimal& b) {
  return Decimal::scaled(checked_multiply(a.coefficient_, b.coefficient_), a.scale_ + b.scale_);
}

std::strong_ordering operator<=>(const Decimal& a, const Decimal& b) {
  // Whole parts first: aligning the scales of two far-apart numbers could overflow.
  const int128 unit_a = power_of_ten(a.scale_), unit_b = power_of_ten(b.scale_);
  const int128 whole_a = a.coefficient_ / unit_a, whole_b = b.coefficient_ / unit_b;
  if (whole_a != whole_b) return whole_a < whole_b ? std::strong_ordering::less : std::strong_ordering::greater;
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

Decimal Decimal::floor_to_multiple(const Decimal& unit) const {
  const int scale = std::max(scale_, unit.scale_);
  const int128 value = checked_multiply(coefficient_, power_of_ten(scale - scale_));
  const int128 step = checked_multiply(unit.coefficient_, power_of_ten(scale - unit.scale_));
  return scaled(value - value % step, scale);
}

Decimal multiply_divide_down(const Decimal& a, const Decimal& numerator, const Decimal& denominator, int scale) {
  const Decimal product = a * numerator;
  // product / denominator at `scale` places: both sides become whole numbers first.
  const int shift = scale + denominator.scale() - product.scale();
  int128 above = product.coefficient(), below = denominator.coefficient();
  if (shift >= 0) {
    above = checked_multiply(above, power_of_ten(shift));
  } else {
    below = checked_multiply(below, power_of_ten(-shift));
  }
  return Decimal::scaled(above / below, scale);
}

}  // namespace nightweigh

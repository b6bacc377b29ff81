// Exact decimals for money, prices and quantities: a 128-bit integer times a power of ten.
//
// Arithmetic is exact or throws DecimalOverflow; nothing is ever rounded unless a function says so in
// its name. Values are kept without trailing zeros, so equal numbers have equal representations and
// equal text: "61.20" parses to the same Decimal as "61.2".
#pragma once

#include <compare>
#include <cstdint>
#include <optional>
#include <stdexcept>
#include <string>
#include <string_view>

namespace nightweigh {

__extension__ using int128 = __int128;

// More digits than 128 bits hold (about 38). process_night turns it into a value; see night.h.
struct DecimalOverflow : std::overflow_error {
  using std::overflow_error::overflow_error;
};

class Decimal {
 public:
  constexpr Decimal() = default;                         // 0
  explicit Decimal(std::int64_t whole);                  // 12 -> 12
  static Decimal scaled(int128 coefficient, int scale);  // coefficient * 10^-scale, 0 <= scale <= 36

  // Plain decimal text: optional '-', digits, optionally '.' and digits. No sign '+', no exponent, no
  // spaces, no digit grouping, no locale. nullopt where it is something else, or has more than
  // max_integer_digits before or max_scale digits after the point (trailing zeros not counted).
  static std::optional<Decimal> parse(std::string_view text, int max_integer_digits = 18, int max_scale = 10);

  std::string to_string() const;                  // shortest: "61.2"
  std::string to_string_padded(int scale) const;  // at least so many digits after the point: "61.20"
  double to_double() const;                       // the nearest double (std::from_chars on the text)
  // The decimal nearest to a finite double at the given scale (0 to 20), half to even. For wanted
  // quantities that come out of weights; never for prices. Throws DecimalOverflow beyond 1e27.
  static Decimal nearest(double value, int scale);

  bool is_zero() const { return coefficient_ == 0; }
  bool is_negative() const { return coefficient_ < 0; }
  bool is_positive() const { return coefficient_ > 0; }
  int scale() const { return scale_; }
  int128 coefficient() const { return coefficient_; }

  Decimal operator-() const;
  friend Decimal operator+(const Decimal& a, const Decimal& b);
  friend Decimal operator-(const Decimal& a, const Decimal& b);
  friend Decimal operator*(const Decimal& a, const Decimal& b);
  Decimal& operator+=(const Decimal& other) { return *this = *this + other; }
  Decimal& operator-=(const Decimal& other) { return *this = *this - other; }
  Decimal abs() const { return is_negative() ? -*this : *this; }

  friend bool operator==(const Decimal& a, const Decimal& b) = default;
  friend std::strong_ordering operator<=>(const Decimal& a, const Decimal& b);

  // Rounded to `scale` (>= 0) digits after the point.
  Decimal rounded_half_even(int scale) const;
  Decimal rounded_down(int scale) const;   // toward zero
  Decimal rounded_floor(int scale) const;  // toward minus infinity

  // The whole multiple of `unit` (> 0) nearest to *this that is not beyond it, toward zero.
  Decimal floor_to_multiple(const Decimal& unit) const;

 private:
  // Any scale >= 0: trailing zeros go first, and only what is left is held against the limit.
  static Decimal reduced(int128 coefficient, int scale);

  int128 coefficient_ = 0;
  int scale_ = 0;
};

// a * numerator / denominator, toward zero, at `scale` (0 to 36) digits after the point. denominator > 0.
// Exact inside: throws DecimalOverflow only where the result itself does not fit.
Decimal multiply_divide_down(const Decimal& a, const Decimal& numerator, const Decimal& denominator,
                             int scale);
// The same, to the nearest, half to even.
Decimal multiply_divide_half_even(const Decimal& a, const Decimal& numerator, const Decimal& denominator,
                                  int scale);

}  // namespace nightweigh

// What the settings say of an instrument, and the minor units of currencies.
#pragma once

#include <string>
#include <string_view>

#include "daemon/domain/decimal.h"

namespace nightweigh {

// The line that every weight object ends with.
inline constexpr std::string_view cash_line = "CASH";

// Quantities of a fractional instrument (lot_size 0) are kept to so many digits.
inline constexpr int fractional_quantity_scale = 8;

struct Instrument {
  std::string id;        // 1 to 32 of A-Z 0-9 . _ -, starting with a letter or digit; never CASH
  std::string currency;  // ISO 4217 code
  Decimal lot_size;      // whole shares a lot; 0 = fractional to 1e-8
  std::string isin;      // may be empty
  std::string mic;       // may be empty

  bool is_fractional() const { return lot_size.is_zero(); }
  // The smallest quantity that can be held: one share, or 1e-8 of one.
  Decimal smallest_quantity() const;
};

// True for an identifier of the form above.
bool is_instrument_id(std::string_view text);

// Digits after the point in which a currency is paid (ISO 4217): 2 for most, 0 for JPY, 3 for KWD ...
int minor_units(std::string_view currency);

// Three capital letters; whether the code exists is not asked here.
bool is_currency_code(std::string_view text);

}  // namespace nightweigh

#include "daemon/domain/instrument.h"

#include <algorithm>
#include <array>

namespace nightweigh {

Decimal Instrument::smallest_quantity() const {
  return is_fractional() ? Decimal::scaled(1, fractional_quantity_scale) : Decimal(1);
}

bool is_instrument_id(std::string_view text) {
  const auto letter_or_digit = [](char c) { return (c >= 'A' && c <= 'Z') || (c >= '0' && c <= '9'); };
  return !text.empty() && text.size() <= 32 && text != cash_line && letter_or_digit(text.front()) &&
         std::all_of(text.begin(), text.end(),
                     [&](char c) { return letter_or_digit(c) || c == '.' || c == '_' || c == '-'; });
}

int minor_units(std::string_view currency) {
  // Only the exceptions; ISO 4217 gives 2 to every other currency that trades.
  static constexpr std::array none = {"JPY", "KRW", "CLP", "ISK", "VND", "PYG", "UGX", "XAF", "XOF",
                                      "XPF", "BIF", "DJF", "GNF", "KMF", "RWF", "VUV", "UYI"};
  static constexpr std::array three = {"BHD", "IQD", "JOD", "KWD", "LYD", "OMR", "TND"};
  static constexpr std::array four = {"CLF", "UYW"};
  const auto in = [&](const auto& list) {
    return std::find(list.begin(), list.end(), currency) != list.end();
  };
  if (in(none)) return 0;
  if (in(three)) return 3;
  if (in(four)) return 4;
  return 2;
}

bool is_currency_code(std::string_view text) {
  return text.size() == 3 &&
         std::all_of(text.begin(), text.end(), [](char c) { return c >= 'A' && c <= 'Z'; });
}

}  // namespace nightweigh

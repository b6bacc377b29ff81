// Step 7 of the night: a move in weights becomes orders in whole lots, within cash.
#pragma once

#include <vector>

#include "daemon/night/night.h"

namespace nightweigh::night {

struct SizedMove {
  std::vector<Order> orders;      // only lines with something to trade, by line
  ledger::Account account_after;  // as if filled at the closes with the modelled costs
  Decimal traded_value;           // sum of quantity * close
};

// Target quantity of a line that moves: nu * w+ * value / close; the difference to the holding is rounded
// to the nearest lot (a line that goes to 0 is sold whole, odd lot included; nothing held is ever oversold).
// Where rounding would take cash below its floor (the lesser of the cash at hand and the reserve's share of
// the book), the buys that were rounded up most give back lots first. `nu`: the move's self-financing factor.
SizedMove size_move(const ledger::Account& account, const std::vector<double>& held,
                    const std::vector<double>& target, double nu, const ClosesOfTheDay& closes,
                    const BookSettings& settings);

}  // namespace nightweigh::night

// Step 2 of the night: splits, dividends and interest act on the account; then the sheet that is due is
// filled as assumed: at the close plus or minus the half spread, with the commission.
#pragma once

#include <vector>

#include "daemon/night/night.h"

namespace nightweigh::night {

// Terms of a trade in a line at these closes.
ledger::TradeTerms trade_terms(const BookSettings& settings, std::size_t line, const Decimal& close);

// The step in which quantities of an instrument are ordered: its lot, or 1e-8 of a share.
Decimal lot_of(const Instrument& instrument);

// How much a buy gives back so that its book's cash rises by about `short_by` (> 0): where lots are worth far
// less than that, its part of the shortfall among `buys` buys; at least one lot. Repeated until nothing is
// short, this ends after a number of steps that grows with the logarithm of the shortfall in lots.
Decimal quantity_given_back(const Instrument& instrument, const Decimal& close, const Decimal& short_by,
                            std::size_t buys);

// What trading the order at its reference close would cost: its commission and half spread.
Decimal estimated_cost(const BookSettings& settings, const Order& order);

// Splits on the holdings and the pending sheet, dividends on the shares held before the split, interest on
// the cash held since the last night.
void apply_corporate_actions(BookState& state, std::vector<ledger::Row>& rows, const ClosesOfTheDay& closes,
                             const BookSettings& settings);

// Fills a sheet: sales first, never more than is held; buys shrink proportionally in whole lots where cash
// would go negative.
void fill_sheet(ledger::Account& account, std::vector<ledger::Row>& rows, const Sheet& sheet,
                const ClosesOfTheDay& closes, const BookSettings& settings);

}  // namespace nightweigh::night

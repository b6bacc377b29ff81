// A book's cash and positions, and the rows that explain every change of them. Exact decimals throughout.
//
// Invariants (checked by check_books every night):
//   L1  cash now = cash before + sum of row.cash; quantity now = quantity before + sum of row.quantity;
//   L2  cash + sum quantity * close = net asset value, to the last digit;
//   L3  net asset value now = before + what the closes moved + what each row added, to the last digit.
#pragma once

#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "daemon/domain/decimal.h"
#include "daemon/domain/instrument.h"

namespace nightweigh::ledger {

enum class Cause { opening, fill, fee, dividend, split, cash_in_lieu, interest };
std::string_view name_of(Cause cause);

struct Row {
  Cause cause = Cause::opening;
  std::optional<std::size_t> line;  // instrument number; none for pure cash
  Decimal quantity;                 // change of the position
  std::optional<Decimal> price;     // a share, where there is one
  Decimal cash;                     // change of cash, in the currency's minor unit
};

struct Account {
  Decimal cash;
  std::vector<Decimal> quantities;  // one an instrument, >= 0

  friend bool operator==(const Account&, const Account&) = default;
};

// Price and cost rates of one line's trades. Fractions are exact: 2 bp = 0.0002.
struct TradeTerms {
  Decimal close;
  Decimal half_spread;  // fraction of the close: buys pay close * (1 + half_spread), sells get the mirror
  Decimal commission;   // fraction of quantity * close
  int minor_units = 2;
};

// What a trade of `quantity` (> 0 buys, < 0 sells) does to cash. What it brings or takes is rounded to the
// minor unit against the book (so that no trade ever gains by rounding), its commission half to even.
struct TradeCash {
  Decimal price;       // a share, spread included
  Decimal proceeds;    // change of cash by the trade itself
  Decimal commission;  // >= 0
  Decimal total() const { return proceeds - commission; }
};
TradeCash trade_cash(const Decimal& quantity, const TradeTerms& terms);

// Each applies one event to the account and appends its rows.
void open_account(Account& account, std::vector<Row>& rows, const Decimal& cash,
                  std::vector<Decimal> quantities);
// New quantity = old * ratio; what is smaller than `smallest` is paid in cash at `close`.
void apply_split(Account& account, std::vector<Row>& rows, std::size_t line, const Decimal& ratio,
                 const Decimal& close, const Decimal& smallest, int minor_units);
void apply_dividend(Account& account, std::vector<Row>& rows, std::size_t line, const Decimal& per_share,
                    int minor_units);
// Simple interest for calendar_days / 365 of yearly_rate on the cash at hand.
void apply_interest(Account& account, std::vector<Row>& rows, const Decimal& yearly_rate, int calendar_days,
                    int minor_units);
void apply_trade(Account& account, std::vector<Row>& rows, std::size_t line, const Decimal& quantity,
                 const TradeTerms& terms);

// Cash + sum of quantity * close, exact.
Decimal net_asset_value(const Account& account, const std::vector<Decimal>& closes);

// Throws std::logic_error naming the invariant that does not hold: a bug of ours, never of input.
// closes_before is empty on a book's first night.
void check_books(const Account& before, const Account& now, const std::vector<Row>& rows,
                 const std::vector<Decimal>& closes_before, const std::vector<Decimal>& closes_now);

}  // namespace nightweigh::ledger

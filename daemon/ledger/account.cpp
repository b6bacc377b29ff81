#include "daemon/ledger/account.h"

#include <stdexcept>

namespace nightweigh::ledger {

std::string_view name_of(Cause cause) {
  switch (cause) {
    case Cause::opening:
      return "opening";
    case Cause::fill:
      return "fill";
    case Cause::fee:
      return "fee";
    case Cause::dividend:
      return "dividend";
    case Cause::split:
      return "split";
    case Cause::cash_in_lieu:
      return "cash_in_lieu";
    case Cause::interest:
      return "interest";
  }
  return "";
}

namespace {

void book(Account& account, std::vector<Row>& rows, const Row& row) {
  account.cash += row.cash;
  if (row.line) account.quantities[*row.line] += row.quantity;
  rows.push_back(row);
}

}  // namespace

TradeCash trade_cash(const Decimal& quantity, const TradeTerms& terms) {
  const Decimal one(1);
  TradeCash out;
  out.price = terms.close * (quantity.is_negative() ? one - terms.half_spread : one + terms.half_spread);
  out.proceeds = (-quantity * out.price).rounded_floor(terms.minor_units);
  out.commission = (quantity.abs() * terms.close * terms.commission).rounded_half_even(terms.minor_units);
  return out;
}

void open_account(Account& account, std::vector<Row>& rows, const Decimal& cash,
                  std::vector<Decimal> quantities) {
  account.cash = Decimal();
  account.quantities.assign(quantities.size(), Decimal());
  if (!cash.is_zero()) book(account, rows, {Cause::opening, std::nullopt, Decimal(), std::nullopt, cash});
  for (std::size_t line = 0; line < quantities.size(); ++line) {
    if (!quantities[line].is_zero()) {
      book(account, rows, {Cause::opening, line, quantities[line], std::nullopt, Decimal()});
    }
  }
}

void apply_split(Account& account, std::vector<Row>& rows, std::size_t line, const Decimal& ratio,
                 const Decimal& close, const Decimal& smallest, int minor_units) {
  const Decimal before = account.quantities[line];
  if (before.is_zero()) return;
  const Decimal exact = before * ratio;
  const Decimal whole = exact.floor_to_multiple(smallest);
  book(account, rows, {Cause::split, line, whole - before, std::nullopt, Decimal()});
  const Decimal fraction = exact - whole;
  if (fraction.is_zero()) return;
  const Decimal cash = (fraction * close).rounded_half_even(minor_units);
  if (!cash.is_zero()) book(account, rows, {Cause::cash_in_lieu, line, Decimal(), close, cash});
}

void apply_dividend(Account& account, std::vector<Row>& rows, std::size_t line, const Decimal& per_share,
                    int minor_units) {
  const Decimal cash = (account.quantities[line] * per_share).rounded_half_even(minor_units);
  if (!cash.is_zero()) book(account, rows, {Cause::dividend, line, Decimal(), per_share, cash});
}

void apply_interest(Account& account, std::vector<Row>& rows, const Decimal& yearly_rate, int calendar_days,
                    int minor_units) {
  const Decimal cash = multiply_divide_half_even(account.cash * yearly_rate, Decimal(calendar_days),
                                                 Decimal(365), minor_units);
  if (!cash.is_zero()) book(account, rows, {Cause::interest, std::nullopt, Decimal(), std::nullopt, cash});
}

void apply_trade(Account& account, std::vector<Row>& rows, std::size_t line, const Decimal& quantity,
                 const TradeTerms& terms) {
  const TradeCash cash = trade_cash(quantity, terms);
  book(account, rows, {Cause::fill, line, quantity, cash.price, cash.proceeds});
  if (!cash.commission.is_zero())
    book(account, rows, {Cause::fee, line, Decimal(), std::nullopt, -cash.commission});
}

Decimal net_asset_value(const Account& account, const std::vector<Decimal>& closes) {
  Decimal value = account.cash;
  for (std::size_t line = 0; line < closes.size(); ++line) value += account.quantities[line] * closes[line];
  return value;
}

void check_books(const Account& before, const Account& now, const std::vector<Row>& rows,
                 const std::vector<Decimal>& closes_before, const std::vector<Decimal>& closes_now) {
  const std::size_t lines = closes_now.size();
  Decimal cash = before.cash;
  std::vector<Decimal> quantities = before.quantities;
  quantities.resize(lines);
  Decimal value = closes_before.empty() ? before.cash : net_asset_value(before, closes_before);
  for (std::size_t line = 0; line < closes_before.size(); ++line) {
    value += before.quantities[line] * (closes_now[line] - closes_before[line]);
  }
  for (const Row& row : rows) {
    cash += row.cash;
    value += row.cash;
    if (row.line) {
      quantities[*row.line] += row.quantity;
      value += row.quantity * closes_now[*row.line];
    }
  }
  if (cash != now.cash) throw std::logic_error("ledger L1: cash is not the sum of its rows");
  if (quantities != now.quantities)
    throw std::logic_error("ledger L1: a position is not the sum of its rows");
  if (value != net_asset_value(now, closes_now)) {
    throw std::logic_error("ledger L3: net asset value is not what the closes and the rows made of it");
  }
  if (now.cash.is_negative()) throw std::logic_error("ledger: cash below zero");
  for (const Decimal& quantity : now.quantities) {
    if (quantity.is_negative()) throw std::logic_error("ledger: a position below zero");
  }
}

}  // namespace nightweigh::ledger

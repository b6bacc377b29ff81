#include "daemon/night/fills.h"

#include <algorithm>
#include <cstdint>

namespace nightweigh::night {

namespace {

// bp to a fraction, exactly.
Decimal fraction(const Decimal& bp) {
  return bp * Decimal::scaled(1, 4);
}

}  // namespace

Decimal lot_of(const Instrument& instrument) {
  return instrument.is_fractional() ? instrument.smallest_quantity() : instrument.lot_size;
}

Decimal quantity_given_back(const Instrument& instrument, const Decimal& close, const Decimal& short_by,
                            std::size_t buys) {
  const Decimal lot = lot_of(instrument);
  // Lots of 1e-8 of a share are worth less than a cent: there all of the shortfall, rounded up.
  if (instrument.is_fractional()) {
    return lot + multiply_divide_down(short_by, Decimal(1), close, fractional_quantity_scale);
  }
  const Decimal lots =
      multiply_divide_down(short_by, Decimal(1), lot * close * Decimal(static_cast<std::int64_t>(buys)), 0);
  return lot * std::max(Decimal(1), lots);
}

ledger::TradeTerms trade_terms(const BookSettings& settings, std::size_t line, const Decimal& close) {
  return {close, fraction(settings.costs[line].half_spread_bp), fraction(settings.costs[line].commission_bp),
          minor_units(settings.currency)};
}

Decimal estimated_cost(const BookSettings& settings, const Order& order) {
  const Decimal rate = fraction(settings.costs[order.line].half_spread_bp) +
                       fraction(settings.costs[order.line].commission_bp);
  return (order.quantity * order.reference_close * rate).rounded_half_even(minor_units(settings.currency));
}

void apply_corporate_actions(BookState& state, std::vector<ledger::Row>& rows, const ClosesOfTheDay& closes,
                             const BookSettings& settings) {
  const int units = minor_units(settings.currency);
  if (state.last_night && !settings.cash.yearly_rate.is_zero()) {
    ledger::apply_interest(state.account, rows, settings.cash.yearly_rate,
                           closes.date.days_since(*state.last_night), units);
  }
  for (std::size_t line = 0; line < settings.instruments.size(); ++line) {
    const Close& close = *closes.closes[line];
    if (close.dividend) ledger::apply_dividend(state.account, rows, line, *close.dividend, units);
    if (!close.split) continue;
    const Decimal held_before = state.account.quantities[line];
    ledger::apply_split(state.account, rows, line, *close.split, close.close,
                        settings.instruments[line].smallest_quantity(), units);
    if (!state.pending) continue;
    for (Order& order : state.pending->orders) {
      if (order.line != line) continue;
      // Selling everything stays selling everything, odd lots included.
      order.quantity =
          !order.buy && order.quantity == held_before
              ? state.account.quantities[line]
              : (order.quantity * *close.split).floor_to_multiple(lot_of(settings.instruments[line]));
    }
  }
}

void fill_sheet(ledger::Account& account, std::vector<ledger::Row>& rows, const Sheet& sheet,
                const ClosesOfTheDay& closes, const BookSettings& settings) {
  std::vector<Order> buys;
  for (const Order& order : sheet.orders) {
    if (order.buy) {
      buys.push_back(order);
      continue;
    }
    const Decimal quantity = std::min(order.quantity, account.quantities[order.line]);
    if (quantity.is_zero()) continue;
    ledger::apply_trade(account, rows, order.line, -quantity,
                        trade_terms(settings, order.line, closes.closes[order.line]->close));
  }

  const auto outlay = [&](const Order& order) {
    return -ledger::trade_cash(order.quantity,
                               trade_terms(settings, order.line, closes.closes[order.line]->close))
                .total();
  };
  Decimal needed;
  for (const Order& order : buys) needed += outlay(order);
  if (needed > account.cash) {
    const Decimal planned = needed;
    for (Order& order : buys) {
      // Toward zero twice, so that the shrunk buys cost at most the cash at hand but for cents of rounding.
      order.quantity = multiply_divide_down(order.quantity, account.cash, planned, fractional_quantity_scale)
                           .floor_to_multiple(lot_of(settings.instruments[order.line]));
    }
    needed = Decimal();
    for (const Order& order : buys) needed += outlay(order);
    while (needed > account.cash) {
      // Rounded costs of shrunk buys may still exceed the cash by cents: the largest buy gives them back.
      const auto largest = std::max_element(
          buys.begin(), buys.end(), [&](const Order& a, const Order& b) { return outlay(a) < outlay(b); });
      const Decimal before = outlay(*largest);
      const Decimal less =
          quantity_given_back(settings.instruments[largest->line], closes.closes[largest->line]->close,
                              needed - account.cash, buys.size());
      largest->quantity = std::max(Decimal(), largest->quantity - less);
      needed += outlay(*largest) - before;
    }
  }
  for (const Order& order : buys) {
    if (order.quantity.is_zero()) continue;
    ledger::apply_trade(account, rows, order.line, order.quantity,
                        trade_terms(settings, order.line, closes.closes[order.line]->close));
  }
}

}  // namespace nightweigh::night

#include "daemon/night/sizing.h"

#include <algorithm>
#include <optional>

#include "daemon/night/fills.h"

namespace nightweigh::night {

namespace {

struct Draft {
  std::size_t line;
  Decimal ideal;     // signed, to 1e-8
  Decimal quantity;  // signed, whole lots (or a whole odd-lot holding)
};

// |quantity| to the nearest multiple of the lot, a half toward zero.
Decimal nearest_lots(const Decimal& quantity, const Decimal& lot) {
  const Decimal magnitude = quantity.abs();
  Decimal whole = magnitude.floor_to_multiple(lot);
  if ((magnitude - whole) + (magnitude - whole) > lot) whole += lot;
  return quantity.is_negative() ? -whole : whole;
}

}  // namespace

SizedMove size_move(const ledger::Account& account, const std::vector<double>& held,
                    const std::vector<double>& target, double nu, const ClosesOfTheDay& closes,
                    const BookSettings& settings) {
  const std::size_t instruments = settings.instruments.size();
  std::vector<Decimal> prices(instruments);
  for (std::size_t line = 0; line < instruments; ++line) prices[line] = closes.closes[line]->close;
  const Decimal value = ledger::net_asset_value(account, prices);

  std::vector<Draft> drafts;
  for (std::size_t line = 0; line < instruments; ++line) {
    if (target[line] == held[line]) continue;  // the gate left it alone, bit for bit
    const Decimal& have = account.quantities[line];
    const double want = nu * target[line] * value.to_double() / prices[line].to_double();
    const Decimal ideal = Decimal::nearest(want, fractional_quantity_scale) - have;
    Decimal quantity = nearest_lots(ideal, lot_of(settings.instruments[line]));
    if (!(target[line] > 0) || -quantity > have) quantity = -have;
    if (!quantity.is_zero()) drafts.push_back({line, ideal, quantity});
  }

  const auto cash_effect = [&](const Draft& draft) {
    return ledger::trade_cash(draft.quantity, trade_terms(settings, draft.line, prices[draft.line])).total();
  };
  const Decimal reserved = settings.cash.in_mix
                               ? Decimal()
                               : (value * Decimal::nearest(settings.cash.reserve, fractional_quantity_scale))
                                     .rounded_down(minor_units(settings.currency));
  const Decimal floor = std::min(account.cash, reserved);
  Decimal cash = account.cash;
  for (const Draft& draft : drafts) cash += cash_effect(draft);
  while (cash < floor) {
    Draft* most = nullptr;
    Decimal most_surplus;
    for (Draft& draft : drafts) {
      if (!draft.quantity.is_positive()) continue;
      const Decimal surplus = (draft.quantity - draft.ideal) * prices[draft.line];
      if (most == nullptr || surplus > most_surplus) {
        most = &draft;
        most_surplus = surplus;
      }
    }
    if (most == nullptr) break;  // only sales are left, and they bring cash
    const Decimal less = quantity_given_back(settings.instruments[most->line], prices[most->line],
                                             floor - cash, drafts.size());
    const Decimal before = cash_effect(*most);
    most->quantity = std::max(Decimal(), most->quantity - less);
    cash += cash_effect(*most) - before;
  }

  SizedMove sized;
  sized.account_after = account;
  std::vector<ledger::Row> rows;
  for (const Draft& draft : drafts) {
    if (draft.quantity.is_zero()) continue;
    Order order{draft.line, draft.quantity.is_positive(), draft.quantity.abs(), prices[draft.line],
                Decimal()};
    order.estimated_cost = estimated_cost(settings, order);
    sized.traded_value += order.quantity * order.reference_close;
    ledger::apply_trade(sized.account_after, rows, draft.line, draft.quantity,
                        trade_terms(settings, draft.line, prices[draft.line]));
    sized.orders.push_back(order);
  }
  return sized;
}

}  // namespace nightweigh::night

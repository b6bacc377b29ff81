// The days on which a book has nights.
#pragma once

#include <optional>
#include <set>

#include "daemon/domain/date.h"

namespace nightweigh {

// weekdays: Monday to Friday but for the listed closed dates. Every such day is a night, so that the
// order in which batches arrive cannot change what is computed.
// any: every date that has closes; which dates those are is only known from the data.
struct Calendar {
  bool any = false;
  std::set<Date> closed;  // dates that are no trading days; used when any is false

  bool is_trading_day(Date date) const { return any || (!date.is_weekend() && !closed.contains(date)); }

  // The first trading day at or after `date`; nullopt for an `any` calendar, where only the data knows.
  std::optional<Date> at_or_after(Date date) const {
    if (any) return std::nullopt;
    while (!is_trading_day(date)) date = date.plus_days(1);
    return date;
  }
};

}  // namespace nightweigh

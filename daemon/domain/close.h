// One row of a batch: what a data job says an instrument closed at.
#pragma once

#include <optional>
#include <string>

#include "daemon/domain/date.h"
#include "daemon/domain/decimal.h"

namespace nightweigh {

struct Close {
  Date date;
  std::string instrument;
  int revision = 0;                 // a correction carries a higher one; 0 to 999,999
  Decimal close;                    // > 0, in the instrument's currency
  std::optional<Decimal> dividend;  // cash a share held before the split, going ex that day; > 0
  std::optional<Decimal> split;     // new shares for one old share, taking effect that day; > 0

  friend bool operator==(const Close&, const Close&) = default;
};

}  // namespace nightweigh

// What a book carries from one night to the next. Bounded: it never grows with history.
#pragma once

#include <cstdint>
#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "daemon/domain/book_settings.h"
#include "daemon/domain/date.h"
#include "daemon/ledger/account.h"
#include "strategies/gate/covariation.h"
#include "strategies/interface/choice.h"
#include "strategies/interface/strategy.h"

namespace nightweigh::night {

// One order of a sheet. Quantities are positive; `buy` is the side.
struct Order {
  std::size_t line = 0;
  bool buy = true;
  Decimal quantity;
  Decimal reference_close;  // the close that it was sized at
  Decimal estimated_cost;   // commission and half spread, in the book's currency

  Decimal signed_quantity() const { return buy ? quantity : -quantity; }
};

struct Sheet {
  Date date;  // the night that decided it
  std::vector<Order> orders;
};

// Weights of the last sheet that got all its approvals.
struct Emitted {
  Date date;
  std::vector<double> weights;
};

struct BookState {
  std::optional<Date> last_night;
  std::uint64_t nights = 0;
  ledger::Account account;
  std::vector<Decimal> closes;   // of the last night, one an instrument
  std::vector<double> wanted;    // of the last night, one a line
  std::optional<Sheet> pending;  // approved, to be filled at the next night's close
  std::optional<Emitted> emitted;
  Decimal opening_value;  // net asset value of the first night before any fill
  double log_wealth_frictionless = 0;
  std::optional<std::string> halted;  // why, where the book is halted

  // Null, or of another rule or number of lines: process_night asks for the history and rebuilds. A state
  // learned with other parameters must come through load_snapshot, which drops the learner.
  std::shared_ptr<const strategies::Strategy> strategy;
  gate::Covariation covariation;  // size() == 0: rebuilt with the strategy
};

// A book before its first night.
BookState initial_state(const BookSettings& settings);

// The rule and parameters that the settings ask for, over the lines that the strategy weighs.
strategies::Choice strategy_choice(const BookSettings& settings);

}  // namespace nightweigh::night

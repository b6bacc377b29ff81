// The settings of one book as the night needs them: validated, resolved, immutable. The settings folder
// makes them from YAML; nothing here reads a file.
#pragma once

#include <map>
#include <optional>
#include <string>
#include <vector>

#include "daemon/domain/calendar.h"
#include "daemon/domain/date.h"
#include "daemon/domain/decimal.h"
#include "daemon/domain/instrument.h"

namespace nightweigh {

struct StartSettings {
  Date date;
  Decimal cash;                             // in the book's currency
  std::map<std::string, Decimal> holdings;  // instrument -> quantity
};

struct CashSettings {
  bool in_mix = false;   // true: cash is a line that the strategy weighs
  double reserve = 0.0;  // share of the book that stays in cash when in_mix is false; [0, 1)
  Decimal yearly_rate;   // simple interest a year on cash, by calendar days / 365; > -1
};

struct StrategySettings {
  std::string rule;                       // exponentiated_gradient | constant_mix | buy_and_hold
  double eta = 0.05;                      // exponentiated_gradient
  std::map<std::string, double> weights;  // constant_mix: one for each line of the mix; empty = equal
};

struct GateSettings {
  double extra_gain = 0.1;                          // the horizon must exceed the payback by this share
  std::optional<double> payback_days_max = 1260.0;  // nullopt = no limit (null in the settings)
  double half_life_days = 250.0;                    // of the covariation
  bool always = false;  // trade to the wanted weights every night, whatever it costs
};

struct LineCosts {
  Decimal commission_bp;   // of the traded value, a side
  Decimal half_spread_bp;  // of the traded value, a side
  // Proportional cost a side as a fraction, as the gate sees it.
  double fraction() const { return (commission_bp + half_spread_bp).to_double() * 1e-4; }
};

enum class Execution { assumed, reported };

struct BookSettings {
  std::string name;
  std::string currency;
  std::string time_zone = "UTC";
  std::vector<Instrument> instruments;  // in the order of the settings; lines are numbered like this
  StartSettings start;
  Calendar calendar;
  CashSettings cash;
  StrategySettings strategy;
  GateSettings gate;
  std::vector<LineCosts> costs;  // one an instrument
  Execution execution = Execution::assumed;
  int execution_lag_nights = 1;  // 0 or 1

  // Canonical JSON of all of the above (never of `service`), and its SHA-256 in lower-case hex: they
  // stand in the journal, and every night names the digest.
  std::string resolved_text;
  std::string digest;

  std::size_t line_count() const { return instruments.size() + 1; }  // the last line is CASH
  std::size_t cash_index() const { return instruments.size(); }
  std::string line_name(std::size_t line) const {
    return line < instruments.size() ? instruments[line].id : std::string(cash_line);
  }
};

}  // namespace nightweigh

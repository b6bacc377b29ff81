// The night: the one pure function that computes it, and its answers.
//
// process_night does no I/O, reads no clock, takes no lock, and gives the same bits for the same inputs
// whatever the number of threads. The live service, verification, replay and the tests all call it.
#pragma once

#include <optional>
#include <string>
#include <variant>
#include <vector>

#include "daemon/domain/book_settings.h"
#include "daemon/domain/close.h"
#include "daemon/ledger/account.h"
#include "daemon/night/book_state.h"
#include "strategies/gate/gate.h"

namespace nightweigh::night {

// The closes of one date, one an instrument in the order of the settings; nullopt where none has come.
struct ClosesOfTheDay {
  Date date;
  std::vector<std::optional<Close>> closes;
};

// What people did to the book since its previous night, in the order of the journal.
struct Halt {
  std::string by, why;
};
struct Resume {
  std::string by, why;
};
using DeskEvent = std::variant<Halt, Resume>;

// One learned day, for rebuilding the strategy: relatives of every line, cash last.
struct HistoryDay {
  Date date;
  std::vector<double> relatives;
  std::vector<std::uint8_t> absent;
};
// Every night after the first, ascending.
using History = std::vector<HistoryDay>;

enum class Verdict { move, stay, withheld };
std::string_view name_of(Verdict verdict);

// Everything that was known and decided; record.h turns it into the bytes that are hashed.
struct Evidence {
  std::vector<Close> closes;            // used, one an instrument
  std::vector<double> relatives;        // one a line, cash last; 1 on the first night
  std::vector<double> held_before;      // at tonight's closes, before any fill of this night
  std::vector<double> held_after;       // after all fills and costs of this night
  std::vector<double> wanted;           // after learning
  std::vector<double> numerical_error;  // of wanted, absolute
  Verdict verdict = Verdict::stay;
  std::string reason;                           // in words
  gate::Decision decision;                      // the best candidate
  std::optional<gate::Worth> sized;             // a candidate that pays, in whole lots and priced again
  bool below_one_lot = false;                   // a candidate that pays, but rounds to no order at all
  std::optional<std::vector<double>> moves_to;  // weights after the sized candidate
  std::vector<gate::Edges> edges;               // one a line; empty where the gate moves
  std::optional<Sheet> sheet;                   // of a `move` night
  double turnover = 0;              // of the sheet: sum of |traded value| / (2 NAV), cash excluded
  std::vector<Date> filled_sheets;  // the nights whose sheets were filled tonight
  std::vector<ledger::Row> rows;    // every change of the account tonight
  Decimal value_before_fills;       // net asset value at tonight's closes
  Decimal value_after;
  // False before any line has moved: the covariation is then the identity, good enough for the band, which
  // does not depend on its level, but no measure of growth or of days.
  bool saving_is_known = false;
  double cost_paid = 0;  // -ln(value after / value before fills), nats
  double response = 0;

  // The figures that the log shows: of the sized move, else of the best candidate; null where none moves.
  const gate::Worth* shown_worth() const;
};

struct Night {
  Date date;
  Evidence evidence;
  BookState after;
  std::string bytes;  // canonical JSON: what the journal hashes
};

// The date's data is not accepted yet: nothing was learned, nothing changed.
struct Waiting {
  std::vector<std::string> reasons;
};

// The strategy must be rebuilt from the relatives of these nights; load them and call again.
struct NeedsHistory {
  Date from, to;
};

using Answer = std::variant<Night, Waiting, NeedsHistory>;

// The date of the next night where the calendar alone decides it; nullopt for an `any` calendar, where it
// is the first date with closes after the last night (at or after the start).
std::optional<Date> next_date(const BookState& state, const BookSettings& settings);

// Precondition: state belongs to settings (initial_state, an earlier night, or load_snapshot). `history` is
// used only for a rebuild; giving it when none is needed changes nothing.
Answer process_night(const BookState& state, const ClosesOfTheDay& closes,
                     const std::vector<DeskEvent>& events, const BookSettings& settings,
                     const History* history = nullptr);

}  // namespace nightweigh::night

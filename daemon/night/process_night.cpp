#include <algorithm>
#include <cmath>
#include <utility>

#include "daemon/night/fills.h"
#include "daemon/night/learning.h"
#include "daemon/night/marking.h"
#include "daemon/night/night.h"
#include "daemon/night/reason.h"
#include "daemon/night/record.h"
#include "daemon/night/sizing.h"
#include "strategies/numerics/numerics.h"

namespace nightweigh::night {

std::string_view name_of(Verdict verdict) {
  switch (verdict) {
    case Verdict::move:
      return "move";
    case Verdict::stay:
      return "stay";
    case Verdict::withheld:
      return "withheld";
  }
  return "";
}

const gate::Worth* Evidence::shown_worth() const {
  if (sized) return &*sized;
  return decision.worth.reason == gate::Worth::Reason::nothing_to_trade ? nullptr : &decision.worth;
}

std::optional<Date> next_date(const BookState& state, const BookSettings& settings) {
  return settings.calendar.at_or_after(state.last_night ? state.last_night->plus_days(1)
                                                        : settings.start.date);
}

namespace {

// Step 1. What the closes lack; empty where the night can go on.
std::vector<std::string> missing(const BookState& state, const ClosesOfTheDay& closes,
                                 const BookSettings& settings) {
  std::vector<std::string> reasons;
  const std::optional<Date> next = next_date(state, settings);
  const Date earliest = state.last_night ? state.last_night->plus_days(1) : settings.start.date;
  if ((next && closes.date != *next) || closes.date < earliest) {
    reasons.push_back("the next night is " + next.value_or(earliest).to_string() + ", not " +
                      closes.date.to_string());
    return reasons;
  }
  for (std::size_t line = 0; line < settings.instruments.size(); ++line) {
    if (line < closes.closes.size() && closes.closes[line]) continue;
    reasons.push_back(closes.date.to_string() + ": no close of " + settings.instruments[line].id + " yet");
  }
  return reasons;
}

std::vector<Decimal> prices_of(const ClosesOfTheDay& closes) {
  std::vector<Decimal> prices;
  for (const std::optional<Close>& close : closes.closes) prices.push_back(close->close);
  return prices;
}

void open_book(BookState& state, std::vector<ledger::Row>& rows, const BookSettings& settings) {
  std::vector<Decimal> quantities;
  for (const Instrument& instrument : settings.instruments) {
    const auto held = settings.start.holdings.find(instrument.id);
    quantities.push_back(held == settings.start.holdings.end() ? Decimal() : held->second);
  }
  ledger::open_account(state.account, rows, settings.start.cash, std::move(quantities));
}

costs::Proportional proportional_costs(const BookSettings& settings) {
  std::vector<double> a_side(settings.line_count(), 0.0);  // cash moves free of cost
  for (std::size_t line = 0; line < settings.instruments.size(); ++line) {
    a_side[line] = settings.costs[line].fraction();
  }
  return {a_side, a_side};
}

// Steps 6 and 7: the gate's question, and what becomes of its answer in whole lots. Fills the evidence.
gate::Problem decide(Evidence& evidence, const BookState& state, const ClosesOfTheDay& closes,
                     const BookSettings& settings) {
  gate::Problem problem{state.covariation.estimate(),
                        to_eigen(evidence.held_after),
                        to_eigen(evidence.wanted),
                        proportional_costs(settings),
                        evidence.response,
                        {settings.gate.extra_gain, settings.gate.payback_days_max, settings.gate.always}};
  evidence.decision = gate::decide(problem);
  evidence.saving_is_known = !problem.covariation.isIdentity(0);
  evidence.verdict = Verdict::stay;
  if (evidence.decision.worth.pays) {
    SizedMove sized = size_move(state.account, evidence.held_after, to_std(evidence.decision.move.weights),
                                numerics::exp(-evidence.decision.worth.cost), closes, settings);
    evidence.below_one_lot = sized.orders.empty();
    if (!evidence.below_one_lot) {
      evidence.moves_to = marked_weights(sized.account_after, prices_of(closes));
      evidence.sized = gate::worth(problem, evidence.decision.penalty, to_eigen(*evidence.moves_to));
      if (evidence.sized->pays || settings.gate.always) {
        evidence.verdict = Verdict::move;
        evidence.turnover = sized.traded_value.to_double() / (2 * evidence.value_after.to_double());
        evidence.sheet = Sheet{closes.date, std::move(sized.orders)};
      }
    }
  }
  if (evidence.verdict == Verdict::stay) evidence.edges = gate::all_edges(problem, evidence.decision.penalty);
  return problem;
}

Answer process(const BookState& before, const ClosesOfTheDay& closes, const std::vector<DeskEvent>& events,
               const BookSettings& settings, const History* history) {
  if (std::vector<std::string> reasons = missing(before, closes, settings); !reasons.empty()) {
    return Waiting{std::move(reasons)};
  }
  const auto waiting = [&](const std::string& why) {
    return Waiting{{closes.date.to_string() + ": the night cannot be computed: " + why}};
  };

  Learner learner{before.strategy, before.covariation};
  if (!has_learner(before, settings)) {
    const bool learned_days = before.nights > 1;  // the first night learns nothing
    if (learned_days && history == nullptr) return NeedsHistory{settings.start.date, *before.last_night};
    if (learned_days &&
        (history->size() != before.nights - 1 || history->back().date != *before.last_night)) {
      return waiting("the history for the rebuild has " + std::to_string(history->size()) +
                     " days, not the " + std::to_string(before.nights - 1) + " up to " +
                     before.last_night->to_string());
    }
    strategies::Outcome<Learner> rebuilt = rebuilt_learner(settings, learned_days ? *history : History{});
    if (!rebuilt) return waiting(rebuilt.error().problem + "; " + rebuilt.error().remedy);
    learner = std::move(*rebuilt);
  }

  Night night;
  night.date = closes.date;
  night.after = before;
  BookState& state = night.after;
  Evidence& evidence = night.evidence;
  const bool first = !before.last_night;
  const std::vector<Decimal> prices = prices_of(closes);
  for (const std::optional<Close>& close : closes.closes) evidence.closes.push_back(*close);
  for (const DeskEvent& event : events) {
    if (const Halt* halt = std::get_if<Halt>(&event)) {
      state.halted = "by " + halt->by + ": " + halt->why;
    } else {
      state.halted.reset();
    }
  }

  evidence.relatives =
      price_relatives(before, closes, settings);  // step 3, before anything acts on the account
  if (const double cash = evidence.relatives[settings.cash_index()]; !(cash > 0)) {
    return waiting(
        "the interest since the last night takes all the cash; look for a missing date or at yearly_rate");
  }

  // Step 2. Opening holdings are stated as of the first night's close, after its corporate actions.
  if (first) {
    open_book(state, evidence.rows, settings);
  } else {
    apply_corporate_actions(state, evidence.rows, closes, settings);
  }
  evidence.value_before_fills = ledger::net_asset_value(state.account, prices);
  if (!evidence.value_before_fills.is_positive()) return waiting("the book is worth nothing");
  if (first) state.opening_value = evidence.value_before_fills;
  evidence.held_before = marked_weights(state.account, prices);
  if (state.pending) {
    fill_sheet(state.account, evidence.rows, *state.pending, closes, settings);
    evidence.filled_sheets.push_back(state.pending->date);
    state.pending.reset();
  }

  // Steps 4 and 5.
  evidence.value_after = ledger::net_asset_value(state.account, prices);
  if (!evidence.value_after.is_positive()) return waiting("the book is worth nothing");
  evidence.held_after = marked_weights(state.account, prices);
  if (!first) {
    const std::vector<std::uint8_t> absent(settings.line_count(), 0);
    strategies::Outcome<Learner> folded = learned(learner, settings, evidence.relatives, absent);
    if (!folded) return waiting(folded.error().problem + "; " + folded.error().remedy);
    learner = std::move(*folded);
    state.log_wealth_frictionless += numerics::log(numerics::dot(before.wanted, evidence.relatives));
    if (!std::isfinite(numerics::exp(state.log_wealth_frictionless))) {
      return waiting("the wealth without costs leaves the range of numbers; look for a close far too large");
    }
  }
  state.strategy = std::move(learner.strategy);
  state.covariation = std::move(learner.covariation);
  evidence.response = state.strategy->response();
  evidence.wanted = over_all_lines(state.strategy->weights(), settings, settings.cash.reserve);
  evidence.numerical_error = over_all_lines(state.strategy->numerical_error(), settings, 0.0);
  if (settings.strategy.rule == "buy_and_hold" && state.emitted) evidence.wanted = evidence.held_after;

  // Steps 6 and 7.
  const gate::Problem problem = decide(evidence, state, closes, settings);
  if (state.halted && evidence.verdict == Verdict::move) {
    evidence.verdict = Verdict::withheld;
    evidence.sheet.reset();
    evidence.turnover = 0;
  }
  evidence.reason = reason_in_words(evidence, problem, closes, settings);
  if (state.halted) evidence.reason += " The book is halted " + *state.halted + ".";
  if (evidence.sheet) {
    state.emitted = Emitted{closes.date, *evidence.moves_to};
    if (settings.execution_lag_nights == 0) {
      fill_sheet(state.account, evidence.rows, *evidence.sheet, closes, settings);
      evidence.filled_sheets.push_back(closes.date);
      evidence.value_after = ledger::net_asset_value(state.account, prices);
      evidence.held_after = marked_weights(state.account, prices);
    } else {
      state.pending = evidence.sheet;
    }
  }

  // Step 8.
  evidence.cost_paid =
      numerics::log(evidence.value_before_fills.to_double() / evidence.value_after.to_double());
  ledger::check_books(before.account, state.account, evidence.rows, before.closes, prices);
  state.last_night = closes.date;
  ++state.nights;
  state.closes = prices;
  state.wanted = evidence.wanted;
  night.bytes = canonical_bytes(night, settings);
  return night;
}

}  // namespace

Answer process_night(const BookState& state, const ClosesOfTheDay& closes,
                     const std::vector<DeskEvent>& events, const BookSettings& settings,
                     const History* history) {
  try {
    return process(state, closes, events, settings, history);
  } catch (const DecimalOverflow& overflow) {
    // Closes and quantities so large that their products leave 38 digits: an input's fault, said as such.
    return Waiting{{closes.date.to_string() + ": the night cannot be computed: " + overflow.what() +
                    "; look for a close or a quantity far too large"}};
  }
}

}  // namespace nightweigh::night

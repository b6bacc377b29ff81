// Books, closes and nights for the tests of the night: settings built by hand (no YAML), invented
// instruments, and short ways to run a book from one night to the next.
#pragma once

#include <doctest/doctest.h>

#include <map>
#include <nlohmann/json.hpp>
#include <optional>
#include <string>
#include <utility>
#include <variant>
#include <vector>

#include "daemon/domain/book_settings.h"
#include "daemon/domain/instrument.h"
#include "daemon/night/night.h"
#include "strategies/digest/sha256.h"

namespace nightweigh::night::testing {

inline Decimal dec(const std::string& text) {
  const std::optional<Decimal> value = Decimal::parse(text, 36, 36);
  REQUIRE(value);
  return *value;
}

inline Date day(const std::string& text) {
  const std::optional<Date> date = Date::parse(text);
  REQUIRE(date);
  return *date;
}

inline Instrument instrument(const std::string& id, const std::string& lot_size = "1") {
  return {id, "EUR", dec(lot_size), "", ""};
}

// ALDER, BRINE, COPPER in single shares; a million EUR in cash from Thursday 2025-01-02; 2 bp commission and
// 3 bp half spread; every weekday; sheets filled at the next night's close.
inline BookSettings harbour(const std::string& rule = "constant_mix") {
  BookSettings book;
  book.name = "harbour";
  book.currency = "EUR";
  book.instruments = {instrument("ALDER"), instrument("BRINE"), instrument("COPPER")};
  book.start = {day("2025-01-02"), dec("1000000"), {}};
  book.strategy.rule = rule;
  book.costs.assign(3, {dec("2"), dec("3")});
  book.resolved_text = "{\"name\":\"harbour\"}";
  book.digest = sha256_hex(book.resolved_text);
  return book;
}

// What an instrument did on a day: close, and a dividend or split where there is one ("" = none).
struct Quote {
  std::string close, dividend, split;
};

inline ClosesOfTheDay closes(const BookSettings& book, Date date, const std::vector<Quote>& quotes) {
  REQUIRE(quotes.size() == book.instruments.size());
  ClosesOfTheDay out{date, {}};
  for (std::size_t line = 0; line < quotes.size(); ++line) {
    if (quotes[line].close.empty()) {
      out.closes.emplace_back();
      continue;
    }
    Close close{date, book.instruments[line].id, 0, dec(quotes[line].close), std::nullopt, std::nullopt};
    if (!quotes[line].dividend.empty()) close.dividend = dec(quotes[line].dividend);
    if (!quotes[line].split.empty()) close.split = dec(quotes[line].split);
    out.closes.push_back(std::move(close));
  }
  return out;
}

inline ClosesOfTheDay closes(const BookSettings& book, const std::string& date,
                             const std::vector<Quote>& quotes) {
  return closes(book, day(date), quotes);
}

// The answer as a Night; fails the test with the reasons where it is none.
inline Night must_be_night(Answer answer) {
  if (const Waiting* waiting = std::get_if<Waiting>(&answer)) {
    for (const std::string& reason : waiting->reasons) MESSAGE(reason);
  }
  REQUIRE(std::holds_alternative<Night>(answer));
  return std::get<Night>(std::move(answer));
}

inline std::vector<std::string> waiting_reasons(const Answer& answer) {
  REQUIRE(std::holds_alternative<Waiting>(answer));
  return std::get<Waiting>(answer).reasons;
}

// A book on its way: keeps the state, hands each day to process_night.
class Desk {
 public:
  explicit Desk(BookSettings settings) : settings_(std::move(settings)), state_(initial_state(settings_)) {}

  Night night(const std::string& date, const std::vector<Quote>& quotes,
              const std::vector<DeskEvent>& events = {}) {
    Night out = must_be_night(process_night(state_, closes(settings_, date, quotes), events, settings_));
    state_ = out.after;
    return out;
  }

  const BookSettings& settings() const { return settings_; }
  BookState& state() { return state_; }

 private:
  BookSettings settings_;
  BookState state_;
};

inline nlohmann::json record(const Night& night) {
  return nlohmann::json::parse(night.bytes);
}

inline double sum(const std::vector<double>& values) {
  double total = 0;
  for (const double value : values) total += value;
  return total;
}

}  // namespace nightweigh::night::testing

// The two answers that are no night: Waiting and NeedsHistory.
#include <doctest/doctest.h>

#include <string>
#include <vector>

#include "daemon/night/record.h"
#include "tests/unit/daemon/night/book_for_tests.h"

namespace nightweigh::night::testing {
namespace {

const std::vector<Quote> quotes{{"61.20", "", ""}, {"10.05", "", ""}, {"250.00", "", ""}};

using Reasons = std::vector<std::string>;

TEST_CASE("waiting: each missing close is named with its date") {
  const BookSettings book = harbour();
  const BookState start = initial_state(book);
  CHECK(waiting_reasons(process_night(
            start, closes(book, "2025-01-02", {{"", "", ""}, {"10", "", ""}, {"", "", ""}}), {}, book)) ==
        Reasons{"2025-01-02: no close of ALDER yet", "2025-01-02: no close of COPPER yet"});
  CHECK(waiting_reasons(process_night(start, {day("2025-01-02"), {}}, {}, book)).size() == 3);
}

TEST_CASE("waiting: a date that is not the next night is named beside the one that is") {
  BookSettings book = harbour();
  Desk desk(book);
  CHECK(waiting_reasons(process_night(desk.state(), closes(book, "2025-01-03", quotes), {}, book)) ==
        Reasons{"the next night is 2025-01-02, not 2025-01-03"});
  CHECK(waiting_reasons(process_night(desk.state(), closes(book, "2025-01-01", quotes), {}, book)) ==
        Reasons{"the next night is 2025-01-02, not 2025-01-01"});
  desk.night("2025-01-02", quotes);
  desk.night("2025-01-03", quotes);
  for (const char* date : {"2025-01-02", "2025-01-03", "2025-01-04", "2025-01-07"}) {
    CHECK(waiting_reasons(process_night(desk.state(), closes(book, date, quotes), {}, book)) ==
          Reasons{"the next night is 2025-01-06, not " + std::string(date)});
  }
  CHECK(next_date(desk.state(), book) == day("2025-01-06"));
}

TEST_CASE("waiting: closed days of the calendar are stepped over, the start too") {
  BookSettings book = harbour();
  book.start.date = day("2025-01-04");  // a Saturday
  book.calendar.closed = {day("2025-01-06")};
  CHECK(next_date(initial_state(book), book) == day("2025-01-07"));
  CHECK(waiting_reasons(process_night(initial_state(book), closes(book, "2025-01-06", quotes), {}, book))
            .size() == 1);
  Desk desk(book);
  CHECK(desk.night("2025-01-07", quotes).date == day("2025-01-07"));
}

TEST_CASE("waiting: a calendar of any dates takes each later one, and no earlier one") {
  BookSettings book = harbour();
  book.calendar.any = true;
  Desk desk(book);
  CHECK_FALSE(next_date(desk.state(), book));
  CHECK(waiting_reasons(process_night(desk.state(), closes(book, "2025-01-01", quotes), {}, book)).size() ==
        1);
  desk.night("2025-01-04", quotes);
  desk.night("2025-02-09", quotes);
  CHECK(waiting_reasons(process_night(desk.state(), closes(book, "2025-02-09", quotes), {}, book)) ==
        Reasons{"the next night is 2025-02-10, not 2025-02-09"});
}

TEST_CASE("waiting: numbers too large are said to be, and crash nothing") {
  BookSettings book = harbour();
  const std::string most = "999999999999999999.9999999999", least = "0.0000000001";
  for (const bool always : {false, true}) {
    for (const int lag : {0, 1}) {
      for (const char* rule : {"constant_mix", "exponentiated_gradient", "buy_and_hold"}) {
        book.strategy.rule = rule;
        book.gate.always = always;
        book.execution_lag_nights = lag;
        // Every combination of extreme closes, dividends and splits over two nights: any answer is one.
        for (const std::string& first : {most, least, std::string("1")}) {
          for (const std::string& second : {most, least, std::string("1")}) {
            for (const std::string& split : {std::string(""), most, least}) {
              const Answer one = process_night(
                  initial_state(book),
                  closes(book, "2025-01-02", {{first, "", ""}, {second, "", ""}, {"1", "", ""}}), {}, book);
              if (!std::holds_alternative<Night>(one)) {
                CHECK(waiting_reasons(one).size() == 1);
                CHECK(waiting_reasons(one)[0].find("2025-01-02") == 0);
                continue;
              }
              const Answer two = process_night(
                  std::get<Night>(one).after,
                  closes(book, "2025-01-03", {{second, split, split}, {first, "", split}, {"1", most, ""}}),
                  {}, book);
              if (std::holds_alternative<Waiting>(two))
                CHECK(waiting_reasons(two)[0].find("2025-01-03") == 0);
            }
          }
        }
      }
    }
  }
  BookState rich = initial_state(book);
  book.start.cash = dec("99999999999999999999999999999999999");
  book.start.holdings = {{"ALDER", dec("999999999999999999")}};
  const Reasons reasons = waiting_reasons(process_night(
      rich, closes(book, "2025-01-02", {{most, "", ""}, {"1", "", ""}, {"1", "", ""}}), {}, book));
  CHECK(reasons[0].find("look for a close or a quantity far too large") != std::string::npos);
}

TEST_CASE("waiting: wealth on paper that leaves the range of doubles") {
  BookSettings book = harbour();
  book.costs.assign(3, {dec("2400"), dec("2400")});
  book.gate.payback_days_max = 1e-9;  // never trades, so that the account itself stays small
  BookState state = initial_state(book);
  bool waited = false;
  Date date = day("2025-01-02");
  for (int n = 0; n < 60 && !waited; ++n) {
    const std::string up = "999999999999999999", down = "0.0000000001";
    const ClosesOfTheDay today =
        closes(book, *next_date(state, book),
               {{n % 2 != 0 ? up : down, "", ""}, {n % 2 != 0 ? down : up, "", ""}, {"1", "", ""}});
    const Answer answer = process_night(state, today, {}, book);
    if (const Night* night = std::get_if<Night>(&answer)) {
      state = night->after;
      date = night->date;
    } else {
      waited = true;
      CHECK(waiting_reasons(answer)[0].find("leaves the range of numbers") != std::string::npos);
    }
  }
  CHECK(waited);
}

TEST_CASE("waiting: a book worth nothing") {
  BookSettings book = harbour();
  book.start.cash = Decimal();
  CHECK(waiting_reasons(process_night(initial_state(book), closes(book, "2025-01-02", quotes), {}, book)) ==
        Reasons{"2025-01-02: the night cannot be computed: the book is worth nothing"});
}

TEST_CASE("waiting: interest that would take more than the cash") {
  BookSettings book = harbour();
  book.calendar.any = true;
  book.cash.yearly_rate = dec("-0.9");
  Desk desk(book);
  desk.night("2025-01-02", quotes);
  const Reasons reasons =
      waiting_reasons(process_night(desk.state(), closes(book, "2027-01-02", quotes), {}, book));
  REQUIRE(reasons.size() == 1);
  CHECK(reasons[0].find("yearly_rate") != std::string::npos);
}

std::vector<Quote> moved(int n) {
  return {
      {std::to_string(60 + n * n % 7), "", ""}, {std::to_string(10 + n * 3 % 5), "", ""}, {"250", "", ""}};
}

TEST_CASE("needs history: a state without its learner asks for its nights, and gets the same bits back") {
  for (const char* rule : {"exponentiated_gradient", "constant_mix", "buy_and_hold"}) {
    const BookSettings book = harbour(rule);
    BookState whole = initial_state(book), forgetful = whole;
    History history;
    for (int n = 0; n < 12; ++n) {
      const ClosesOfTheDay today = closes(book, *next_date(whole, book), moved(n));
      const Night night = must_be_night(process_night(whole, today, {}, book));
      // Forget everything learned, every night.
      forgetful.strategy.reset();
      forgetful.covariation = gate::Covariation();
      const Answer without = process_night(forgetful, today, {}, book);
      if (n >= 2) {
        REQUIRE(std::holds_alternative<NeedsHistory>(without));
        CHECK(std::get<NeedsHistory>(without).from == book.start.date);
        CHECK(std::get<NeedsHistory>(without).to == *whole.last_night);
      } else {
        REQUIRE(std::holds_alternative<Night>(without));  // the first night learned nothing
      }
      const Night rebuilt = must_be_night(process_night(forgetful, today, {}, book, &history));
      CHECK(rebuilt.bytes == night.bytes);
      // Early, and when nobody asked: no difference.
      CHECK(must_be_night(process_night(whole, today, {}, book, &history)).bytes == night.bytes);
      const History nonsense{{day("2020-01-01"), {1, 2, 3, 4}, {0, 0, 0, 0}}};
      CHECK(must_be_night(process_night(whole, today, {}, book, &nonsense)).bytes == night.bytes);
      if (n < 2)
        CHECK(must_be_night(process_night(forgetful, today, {}, book, &nonsense)).bytes == night.bytes);

      if (n > 0) {
        const std::optional<HistoryDay> learned = history_day(night.bytes);
        REQUIRE(learned);
        CHECK(learned->date == night.date);
        CHECK(learned->relatives == night.evidence.relatives);
        history.push_back(*learned);
      }
      whole = night.after;
      forgetful = rebuilt.after;
    }
  }
}

TEST_CASE("needs history: a history that is not the book's is refused in words") {
  const BookSettings book = harbour("exponentiated_gradient");
  Desk desk(book);
  History history;
  for (int n = 0; n < 5; ++n) {
    const Night night = desk.night(next_date(desk.state(), book)->to_string(), moved(n));
    if (n > 0) history.push_back(*history_day(night.bytes));
  }
  desk.state().strategy.reset();
  const ClosesOfTheDay today = closes(book, *next_date(desk.state(), book), moved(5));
  REQUIRE(std::holds_alternative<Night>(process_night(desk.state(), today, {}, book, &history)));
  const auto refused = [&](const History& given) {
    const Reasons reasons = waiting_reasons(process_night(desk.state(), today, {}, book, &given));
    CHECK(reasons.size() == 1);
    return reasons[0];
  };
  CHECK(refused({}).find("has 0 days, not the 4 up to 2025-01-08") != std::string::npos);
  History shorter(history.begin(), history.end() - 1);
  CHECK(refused(shorter).find("has 3 days") != std::string::npos);
  History later = history;
  later.back().date = day("2025-01-09");
  CHECK(refused(later).find("up to 2025-01-08") != std::string::npos);
  History narrow = history;
  narrow[1].relatives.pop_back();
  CHECK(refused(narrow).find("another number of lines") != std::string::npos);
  History bad = history;
  bad[1].relatives[0] = -1;
  CHECK(refused(bad).find("2025-01-06: the relative of line 0 is -1") != std::string::npos);
}

TEST_CASE("needs history: another rule or another mix than the state's asks for it too") {
  BookSettings book = harbour("exponentiated_gradient");
  Desk desk(book);
  for (int n = 0; n < 3; ++n) desk.night(next_date(desk.state(), book)->to_string(), moved(n));
  const ClosesOfTheDay today = closes(book, *next_date(desk.state(), book), moved(3));
  BookSettings other = book;
  other.strategy.rule = "constant_mix";
  CHECK(std::holds_alternative<NeedsHistory>(process_night(desk.state(), today, {}, other)));
  other = book;
  other.cash.in_mix = true;
  CHECK(std::holds_alternative<NeedsHistory>(process_night(desk.state(), today, {}, other)));
}

}  // namespace
}  // namespace nightweigh::night::testing

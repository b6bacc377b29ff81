#include "daemon/night/reason.h"

#include <doctest/doctest.h>

#include <cmath>
#include <optional>
#include <string>
#include <vector>

#include "tests/unit/daemon/night/book_for_tests.h"

namespace nightweigh::night::testing {
namespace {

bool has(const std::string& text, const std::string& part) {
  return text.find(part) != std::string::npos;
}

// The text with every number replaced by '#': what is left is the form of the sentences.
std::string form_of(const std::string& text) {
  std::string out;
  for (std::size_t at = 0; at < text.size(); ++at) {
    const auto digit = [&](std::size_t i) { return i < text.size() && text[i] >= '0' && text[i] <= '9'; };
    if (!digit(at)) {
      out += text[at];
      continue;
    }
    while (digit(at + 1) || (at + 1 < text.size() && text[at + 1] == '.' && digit(at + 2))) ++at;
    out += '#';
  }
  return out;
}

// The number after `words` in the text; nullopt where they do not stand there.
std::optional<double> number_after(const std::string& text, const std::string& words) {
  const std::size_t at = text.find(words);
  if (at == std::string::npos) return std::nullopt;
  return std::stod(text.substr(at + words.size()));
}

// A book of two lines after enough quiet nights to know its covariation, held off its wanted mix by `move` on
// the last night.
struct Bench {
  BookSettings book = harbour();
  BookState state;
  std::vector<Quote> last;

  explicit Bench(const std::string& lot = "1", double cost_bp = 5) {
    book.instruments = {instrument("ALDER", lot), instrument("BRINE", lot)};
    const Decimal half = Decimal::nearest(cost_bp / 2, 2);
    book.costs.assign(2, {half, half});
    state = initial_state(book);
    for (int n = 0; n < 40; ++n) {
      const double a = 61.2 * (1 + 0.01 * (n % 2)), b = 10.0 * (1 + 0.02 * ((n / 2) % 2));
      last = {{Decimal::nearest(a, 2).to_string(), "", ""}, {Decimal::nearest(b, 2).to_string(), "", ""}};
      state =
          must_be_night(process_night(state, closes(book, *next_date(state, book), last), {}, book)).after;
    }
    state.pending.reset();
  }
  Night with(const std::string& alder, const std::vector<DeskEvent>& events = {}) const {
    std::vector<Quote> quotes = last;
    quotes[0].close = alder;
    return must_be_night(process_night(state, closes(book, *next_date(state, book), quotes), events, book));
  }
};

TEST_CASE("reason: a night that stays names the nearest line, its band, and the close that would move it") {
  const Bench bench;
  const Night night = bench.with("61.20");
  REQUIRE(night.evidence.verdict == Verdict::stay);
  const std::string& reason = night.evidence.reason;
  INFO(reason);
  const std::string form = form_of(reason);
  CHECK(form.rfind("stay. Held ", 0) == 0);
  CHECK(has(form, " # %, wanted # %, no trade between # and #. It is the nearest line, "));
  CHECK((has(form, "# of the way to its edge; ") || has(form, "just inside its edge; ")));
  CHECK(has(form, "with all else unchanged, a close of "));
  CHECK(has(form, " near # would move it. The verdict would be "));
  CHECK(form.substr(form.size() - 8) == "doubled.");
}

TEST_CASE("reason: the close that it names moves the line, and a little less does not") {
  const Bench bench;
  // Where ALDER is the nearest line, ask for its close and put it in.
  int asked = 0;
  for (const char* start : {"61.90", "62.40", "63.00", "60.30", "59.90", "59.00"}) {
    const Night night = bench.with(start);
    const std::optional<double> close = number_after(night.evidence.reason, "a close of ALDER near ");
    if (night.evidence.verdict != Verdict::stay || !close) continue;
    ++asked;
    const double named = *close, from = std::stod(start);
    // Under tonight's covariation and mix, which is what the sentence is about: a cent beyond the named close
    // the gate moves, two cents short of it it does not.
    const auto verdict_at = [&](double price) {
      const double factor = price / from;
      std::vector<double> held = night.evidence.held_after;
      const double before = held[0];
      for (double& weight : held) weight /= 1 + before * (factor - 1);
      held[0] *= factor;
      return gate::decide({night.after.covariation.estimate(),
                           Eigen::Map<const Eigen::VectorXd>(held.data(), 3),
                           Eigen::Map<const Eigen::VectorXd>(night.evidence.wanted.data(), 3),
                           {{0.0005, 0.0005, 0}, {0.0005, 0.0005, 0}},
                           night.evidence.response,
                           {bench.book.gate.extra_gain, bench.book.gate.payback_days_max, false}})
          .worth.pays;
    };
    const double cent = named > from ? 0.01 : -0.01;
    CHECK(verdict_at(named + cent));
    CHECK_FALSE(verdict_at(named - 2 * cent));
  }
  CHECK(asked >= 1);
}

TEST_CASE("reason: a night that moves says cost, saving, payback and horizon") {
  const Bench bench;
  const Night night = bench.with("75.00");
  REQUIRE(night.evidence.verdict == Verdict::move);
  INFO(night.evidence.reason);
  const std::string form = form_of(night.evidence.reason);
  CHECK(form.rfind("move. Cost # bp once. Saves # bp of growth a year if the wanted mix is the right one. "
                   "Pays back in # trading days; horizon # days. The verdict would be ",
                   0) == 0);
  // The figures are those of the record.
  const nlohmann::json figures = record(night);
  const std::optional<double> cost = number_after(night.evidence.reason, "Cost ");
  REQUIRE(cost);
  CHECK(*cost == doctest::Approx(figures["cost_bp"].get<double>()).epsilon(0.06));
}

TEST_CASE("reason: the first night does not pretend to know what a move saves") {
  const Night night =
      Desk(harbour()).night("2025-01-02", {{"61.20", "", ""}, {"10.05", "", ""}, {"250", "", ""}});
  CHECK(has(night.evidence.reason, "move. Cost "));
  CHECK(has(night.evidence.reason, "cannot be said before the lines have moved."));
  CHECK_FALSE(has(night.evidence.reason, "Saves"));
}

TEST_CASE("reason: without costs") {
  const Bench bench("0", 0);
  const Night night = bench.with("75.00");
  REQUIRE(night.evidence.verdict == Verdict::move);
  INFO(night.evidence.reason);
  CHECK(has(night.evidence.reason, "move. It costs nothing. Saves "));
  CHECK(has(night.evidence.reason, "Pays back at once"));
}

TEST_CASE("reason: lots too large for the move, or for what it saves") {
  const Bench bench("5000");
  bool below = false, sized = false;
  for (const char* close : {"63.00", "65.00", "67.00", "70.00", "74.00", "80.00", "88.00", "95.00"}) {
    const Night night = bench.with(close);
    if (night.evidence.below_one_lot) {
      below = true;
      CHECK(has(night.evidence.reason, "stay. The best move is smaller than one lot in every line."));
    } else if (night.evidence.verdict == Verdict::stay && night.evidence.sized) {
      sized = true;
      CHECK(has(night.evidence.reason, "stay. The best move would pay, but in whole lots it does not."));
    }
    CHECK_FALSE(has(night.evidence.reason, "horizon -"));
    CHECK_FALSE(has(night.evidence.reason, "Saves -"));
  }
  CHECK((below || sized));
}

TEST_CASE("reason: a limit on the payback is named with its days") {
  Bench bench;
  bench.book.gate.payback_days_max = 0.5;
  const Night night = bench.with("75.00");
  REQUIRE(night.evidence.verdict == Verdict::stay);
  INFO(night.evidence.reason);
  CHECK(has(night.evidence.reason,
            "longer to pay back than the 0.5 trading days that the settings allow. Cost "));
}

TEST_CASE("reason: a margin that is not earned is named") {
  Bench bench;
  bench.book.gate.extra_gain = 500;
  const Night night = bench.with("75.00");
  REQUIRE(night.evidence.verdict == Verdict::stay);
  INFO(night.evidence.reason);
  CHECK(has(night.evidence.reason,
            "A line has left its band, but the move would not earn its cost with a margin of 50000 %."));
}

TEST_CASE("reason: halted") {
  const Bench bench;
  const Night night = bench.with("75.00", {Halt{"Mara at the desk", "two closes look wrong"}});
  CHECK(
      night.evidence.reason ==
      "withheld. The rule has learned tonight and the holdings are marked, but no sheet is made. The book is "
      "halted by Mara at the desk: two closes look wrong.");
}

TEST_CASE("reason: always, and buy and hold") {
  Bench bench;
  bench.book.gate.always = true;
  CHECK(has(bench.with("75.00").evidence.reason,
            "move. This book trades to the wanted mix every night, whatever it costs. Cost "));

  Desk desk(harbour("buy_and_hold"));
  desk.night("2025-01-02", {{"61.20", "", ""}, {"10.05", "", ""}, {"250", "", ""}});
  CHECK(has(desk.night("2025-01-03", {{"61.20", "", ""}, {"10.05", "", ""}, {"250", "", ""}}).evidence.reason,
            "stay. The wanted mix is the held one: buy and hold trades once, to its first mix."));
}

}  // namespace
}  // namespace nightweigh::night::testing

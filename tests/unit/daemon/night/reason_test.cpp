#include "daemon/night/reason.h"

#include <doctest/doctest.h>

#include <cmath>
#include <random>
#include <regex>
#include <string>
#include <vector>

#include "tests/unit/daemon/night/book_for_tests.h"

namespace nightweigh::night::testing {
namespace {

bool has(const std::string& text, const std::string& part) { return text.find(part) != std::string::npos; }

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
    std::mt19937_64 random(70);
    for (int n = 0; n < 40; ++n) {
      const double a = 61.2 * (1 + 0.01 * (n % 2)), b = 10.0 * (1 + 0.02 * ((n / 2) % 2));
      last = {{Decimal::nearest(a, 2).to_string(), "", ""}, {Decimal::nearest(b, 2).to_string(), "", ""}};
      state = must_be_night(process_night(state, closes(book, *next_date(state, book), last), {}, book)).after;
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
  const std::regex form(
      R"(stay\. Held (ALDER|BRINE) \d+\.\d %, wanted \d+\.\d %, no trade between \d+\.\d and \d+\.\d\. It is the nearest line, (0\.\d of the way to|just inside) its edge; with the other closes unchanged, a close of (ALDER|BRINE) at (\d+\.\d\d) would move it\. The verdict would be .* costs (halved or )?doubled\.)");
  std::smatch parts;
  const std::string& reason = night.evidence.reason;
  INFO(reason);
  REQUIRE(std::regex_match(reason, parts, form));
}

TEST_CASE("reason: the close that it names does move the line, and a cent less does not") {
  const Bench bench;
  // Where ALDER is the nearest line, ask for its close and put it in.
  int asked = 0;
  for (const char* start : {"61.90", "62.40", "63.00", "60.30", "59.90", "59.00"}) {
    const Night night = bench.with(start);
    const std::regex close(R"(a close of ALDER at (\d+\.\d\d) would move it)");
    std::smatch parts;
    if (night.evidence.verdict != Verdict::stay || !std::regex_search(night.evidence.reason, parts, close)) continue;
    ++asked;
    const double named = std::stod(parts[1].str()), from = std::stod(start);
    const double beyond = named > from ? 0.02 : -0.02;
    // The covariation and the mix are tonight's in the statement, so the question is asked of the gate itself.
    const gate::Triggers triggers = gate::triggers(
        {night.after.covariation.estimate(), Eigen::Map<const Eigen::VectorXd>(night.evidence.held_after.data(), 3),
         Eigen::Map<const Eigen::VectorXd>(night.evidence.wanted.data(), 3),
         {{0.0005, 0.0005, 0}, {0.0005, 0.0005, 0}}, night.evidence.response,
         {bench.book.gate.extra_gain, bench.book.gate.payback_days_max, false}},
        night.evidence.decision.penalty, 0);
    const std::optional<double> factor = beyond > 0 ? triggers.factor_above : triggers.factor_below;
    REQUIRE(factor);
    CHECK(std::abs(named - from * *factor) <= 0.0051);
    // And roughly of the next night itself, where the day's own move enters the covariation too.
    CHECK(bench.with(Decimal::nearest(named + 40 * beyond, 2).to_string()).evidence.verdict == Verdict::move);
  }
  CHECK(asked >= 1);
}

TEST_CASE("reason: a night that moves says cost, saving, payback and horizon") {
  const Bench bench;
  const Night night = bench.with("75.00");
  REQUIRE(night.evidence.verdict == Verdict::move);
  INFO(night.evidence.reason);
  const std::regex form(
      R"(move\. Cost [\d.]+ bp once\. Saves [\d.]+ bp of growth a year if the wanted mix is the right one\. Pays back in \d+ trading days?; horizon \d+ days\. The verdict would be .*doubled\.)");
  CHECK(std::regex_match(night.evidence.reason, form));
  // The figures are those of the record.
  const nlohmann::json figures = record(night);
  const std::string cost = night.evidence.reason.substr(std::string("move. Cost ").size());
  CHECK(std::stod(cost) == doctest::Approx(figures["cost_bp"].get<double>()).epsilon(0.06));
}

TEST_CASE("reason: the first night does not pretend to know what a move saves") {
  const Night night = Desk(harbour()).night("2025-01-02", {{"61.20", "", ""}, {"10.05", "", ""}, {"250", "", ""}});
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
  CHECK(has(night.evidence.reason, "longer to pay back than the 0.5 trading days that the settings allow. Cost "));
}

TEST_CASE("reason: a margin that is not earned is named") {
  Bench bench;
  bench.book.gate.extra_gain = 500;
  const Night night = bench.with("75.00");
  REQUIRE(night.evidence.verdict == Verdict::stay);
  INFO(night.evidence.reason);
  CHECK(has(night.evidence.reason, "A line has left its band, but the move would not earn its cost with a margin of 50000 %."));
}

TEST_CASE("reason: halted") {
  const Bench bench;
  const Night night = bench.with("75.00", {Halt{"Mara at the desk", "two closes look wrong"}});
  CHECK(night.evidence.reason ==
        "withheld. The rule has learned tonight and the holdings are marked, but no sheet is made. The book is "
        "halted by Mara at the desk: two closes look wrong.");
}

TEST_CASE("reason: always, and buy and hold") {
  Bench bench;
  bench.book.gate.always = true;
  CHECK(has(bench.with("75.00").evidence.reason, "move. This book trades to the wanted mix every night, whatever it costs. Cost "));

  Desk desk(harbour("buy_and_hold"));
  desk.night("2025-01-02", {{"61.20", "", ""}, {"10.05", "", ""}, {"250", "", ""}});
  CHECK(has(desk.night("2025-01-03", {{"61.20", "", ""}, {"10.05", "", ""}, {"250", "", ""}}).evidence.reason,
            "stay. The wanted mix is the held one: buy and hold trades once, to its first mix."));
}

}  // namespace
}  // namespace nightweigh::night::testing

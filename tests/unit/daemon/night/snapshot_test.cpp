#include "daemon/night/snapshot.h"

#include <doctest/doctest.h>

#include <cmath>
#include <random>
#include <string>
#include <vector>

#include "daemon/night/record.h"
#include "tests/unit/daemon/night/book_for_tests.h"

namespace nightweigh::night::testing {
namespace {

// A random market of closes with cents, some dividends and splits.
std::vector<Quote> market_day(std::mt19937_64& random, std::vector<double>& prices) {
  std::normal_distribution<double> move(0.0, 0.03);
  std::vector<Quote> out;
  for (double& price : prices) {
    Quote quote;
    price *= std::exp(move(random));
    if (random() % 20 == 0) {
      quote.split = price > 50 ? "2" : "0.1";
      price = price > 50 ? price / 2 : price * 10;
    }
    if (random() % 15 == 0) quote.dividend = "0.37";
    quote.close = Decimal::nearest(price, 2).to_string();
    out.push_back(quote);
  }
  return out;
}

Night run_one(BookState& state, const BookSettings& book, const std::vector<Quote>& quotes) {
  Night night = must_be_night(process_night(state, closes(book, *next_date(state, book), quotes), {}, book));
  state = night.after;
  return night;
}

BookState through_bytes(const BookState& state, const BookSettings& book) {
  Result<LoadedState> loaded = load_snapshot(save_snapshot(state, book), book);
  REQUIRE(loaded);
  REQUIRE(loaded->rebuild_because == "");
  return loaded->state;
}

TEST_CASE("snapshot: saved and loaded at every night, the run equals the uninterrupted one bit for bit") {
  std::mt19937_64 random(60);
  int moves = 0, runs = 0;
  for (const char* rule : {"exponentiated_gradient", "constant_mix", "buy_and_hold"}) {
    for (const int lag : {0, 1}) {
      for (const char* lot : {"0", "1", "10"}) {
        for (const int cash : {0, 1, 2}) {
          BookSettings book = harbour(rule);
          book.instruments = {instrument("ALDER", lot), instrument("BRINE", "1"), instrument("COPPER", lot)};
          book.execution_lag_nights = lag;
          book.cash = {cash == 1, cash == 2 ? 0.03 : 0.0, dec("0.02")};
          std::vector<double> prices{61.2, 10.05, 250};
          BookState whole = initial_state(book), resumed = whole;
          for (int n = 0; n < 25; ++n) {
            const std::vector<Quote> quotes = market_day(random, prices);
            const Night night = run_one(whole, book, quotes);
            const Night again = run_one(resumed, book, quotes);
            REQUIRE(again.bytes == night.bytes);
            resumed = through_bytes(resumed, book);
            const SnapshotBytes a = save_snapshot(whole, book), b = save_snapshot(resumed, book);
            REQUIRE(a.desk == b.desk);
            REQUIRE(a.strategy == b.strategy);
            REQUIRE(a.covariation == b.covariation);
            moves += night.evidence.verdict == Verdict::move ? 1 : 0;
          }
          ++runs;
        }
      }
    }
  }
  CHECK(moves >= runs);  // pending and emitted sheets went through the bytes too
}

TEST_CASE("snapshot: a halted book stays halted") {
  const BookSettings book = harbour();
  Desk desk(book);
  desk.night("2025-01-02", {{"61.20", "", ""}, {"10.05", "", ""}, {"250", "", ""}},
             {Halt{"the desk", "a \"drill\"\n"}});
  CHECK(through_bytes(desk.state(), book).halted == desk.state().halted);
}

struct Saved {
  BookSettings book = harbour("exponentiated_gradient");
  SnapshotBytes bytes;

  Saved() {
    Desk desk(book);
    desk.night("2025-01-02", {{"61.20", "", ""}, {"10.05", "", ""}, {"250", "", ""}});
    desk.night("2025-01-03", {{"62.20", "", ""}, {"10.15", "", ""}, {"249", "", ""}});
    bytes = save_snapshot(desk.state(), book);
  }
  std::string rebuild_because(const BookSettings& settings) const {
    const Result<LoadedState> loaded = load_snapshot(bytes, settings);
    REQUIRE(loaded);
    if (!loaded->rebuild_because.empty()) {
      CHECK_FALSE(loaded->state.strategy);
      CHECK(loaded->state.covariation.size() == 0);
      CHECK(std::holds_alternative<NeedsHistory>(process_night(
          loaded->state,
          closes(settings, "2025-01-06", {{"61.20", "", ""}, {"10.05", "", ""}, {"250", "", ""}}), {},
          settings)));
    }
    return loaded->rebuild_because;
  }
};

TEST_CASE("snapshot: other parameters of the learner ask for a rebuild, with the reason in words") {
  const Saved saved;
  CHECK(saved.rebuild_because(saved.book) == "");
  BookSettings other = saved.book;
  other.strategy.eta = 0.06;
  CHECK(saved.rebuild_because(other) ==
        "the state was learned with other parameters than rule=exponentiated_gradient;m=3;eta=0.06");
  other = saved.book;
  other.strategy.rule = "buy_and_hold";
  CHECK(saved.rebuild_because(other) ==
        "the state is of rule exponentiated_gradient, the book runs buy_and_hold");
  other = saved.book;
  other.gate.half_life_days = 100;
  CHECK(saved.rebuild_because(other) == "the covariation was learned with another half-life");
  other = saved.book;
  other.cash.in_mix = true;
  CHECK(saved.rebuild_because(other) != "");
  // Settings that the learner knows nothing of change nothing.
  other = saved.book;
  other.gate.extra_gain = 0.5;
  other.costs.assign(3, {dec("7"), dec("9")});
  CHECK(saved.rebuild_because(other) == "");
}

TEST_CASE("snapshot: a damaged learner asks for a rebuild, whichever byte it is") {
  const Saved saved;
  for (std::size_t at = 0; at < saved.bytes.strategy.size(); at += 7) {
    Saved bad = saved;
    bad.bytes.strategy[at] = static_cast<char>(bad.bytes.strategy[at] ^ 1);
    CHECK(bad.rebuild_because(bad.book) != "");
  }
  for (std::size_t at = 0; at < saved.bytes.covariation.size(); at += 7) {
    Saved bad = saved;
    bad.bytes.covariation[at] = static_cast<char>(bad.bytes.covariation[at] ^ 1);
    CHECK(bad.rebuild_because(bad.book) != "");
  }
  Saved gone = saved;
  gone.bytes.strategy.clear();
  CHECK(gone.rebuild_because(gone.book) != "");
}

TEST_CASE("snapshot: a desk text that is not this book's is refused, and no part of it is taken") {
  const Saved saved;
  const auto refused = [&](const BookSettings& settings, const std::string& desk) {
    const Result<LoadedState> loaded =
        load_snapshot({desk, saved.bytes.strategy, saved.bytes.covariation}, settings);
    REQUIRE_FALSE(loaded);
    CHECK(loaded.error().kind == ErrorKind::corrupted);
    CHECK(loaded.error().place == "book " + settings.name);
    return loaded.error().value;
  };
  BookSettings other = saved.book;
  other.name = "haven";
  CHECK(refused(other, saved.bytes.desk) == "it belongs to the book \"harbour\"");
  other = saved.book;
  other.currency = "USD";
  CHECK(refused(other, saved.bytes.desk) == "it is kept in \"EUR\"");
  other = saved.book;
  std::swap(other.instruments[0], other.instruments[1]);
  CHECK(refused(other, saved.bytes.desk).find("its instruments are") == 0);
  other = saved.book;
  other.instruments.push_back(instrument("DUNE"));
  other.costs.emplace_back();
  CHECK(refused(other, saved.bytes.desk).find("its instruments are") == 0);

  using nlohmann::json;
  const json desk = json::parse(saved.bytes.desk);
  refused(saved.book, "");
  refused(saved.book, "[]");
  refused(saved.book, saved.bytes.desk.substr(0, saved.bytes.desk.size() - 1));
  for (const auto& [key, value] : desk.items()) {
    CAPTURE(key);
    json bad = desk;
    bad.erase(key);
    refused(saved.book, bad.dump());
    bad[key] = json::object({{"x", 1}});
    refused(saved.book, bad.dump());
  }
  json bad = desk;
  bad["wanted"][0] = 0.9;
  CHECK(refused(saved.book, bad.dump()) == "weights that do not sum to 1");
  bad = desk;
  bad["wanted"] = {1.2, -0.2, 0.0, 0.0};
  CHECK(refused(saved.book, bad.dump()) == "a weight below 0");
  bad = desk;
  bad["cash"] = "1e6";
  CHECK(refused(saved.book, bad.dump()) == "\"1e6\" is no decimal number");
  bad = desk;
  bad["format"] = 2;
  CHECK(refused(saved.book, bad.dump()) == "another format number");
}

TEST_CASE("record: canonical bytes are JSON with sorted keys and the promised members") {
  const BookSettings book = harbour("exponentiated_gradient");
  Desk desk(book);
  desk.night("2025-01-02", {{"61.20", "", ""}, {"10.05", "", ""}, {"250", "", ""}});
  const Night night = desk.night("2025-01-03", {{"30.70", "0.07", "2"}, {"10.15", "", ""}, {"249", "", ""}});
  const nlohmann::json parsed = record(night);
  CHECK(parsed.dump() == night.bytes);
  for (const char* key :
       {"date", "relatives", "wanted", "held_before", "held_after", "verdict", "cost_bp",
        "growth_saved_bp_year", "payback_days", "horizon_days", "cost_paid", "wealth_net",
        "wealth_frictionless", "reason", "moves_to", "numerical_error", "turnover", "lines"}) {
    CAPTURE(key);
    CHECK(parsed.contains(key));
  }
  CHECK(parsed["closes"][0] == nlohmann::json({{"instrument", "ALDER"},
                                               {"date", "2025-01-03"},
                                               {"revision", 0},
                                               {"close", "30.7"},
                                               {"dividend", "0.07"},
                                               {"split", "2"}}));
  CHECK(parsed["settings"] == book.digest);
  CHECK_FALSE(parsed.contains("batch"));
  for (const char* key : {"relatives", "wanted", "held_before", "held_after", "numerical_error"}) {
    CHECK(parsed[key].size() == 4);
    CHECK(parsed[key].contains("CASH"));
  }
}

TEST_CASE("record: history_day takes no other bytes for a night") {
  for (const char* text : {"", "{}", "[]", "null", "{\"closes\":1,\"relatives\":{},\"date\":\"2025-01-02\"}",
                           "{\"closes\":[],\"relatives\":{},\"date\":7}",
                           "{\"closes\":[],\"relatives\":{},\"date\":\"2025-13-02\"}",
                           "{\"closes\":[{}],\"relatives\":{},\"date\":\"2025-01-02\"}",
                           "{\"closes\":[{\"instrument\":1}],\"relatives\":{},\"date\":\"2025-01-02\"}",
                           "{\"closes\":[1],\"relatives\":[],\"date\":\"2025-01-02\"}", "\xff\xfe"}) {
    CAPTURE(text);
    CHECK_FALSE(history_day(text));
  }
  const auto absent = history_day(
      R"({"closes":[{"instrument":"ALDER"},{"instrument":"BRINE"}],"date":"2025-01-02","relatives":{"ALDER":null,"BRINE":1.5,"CASH":1.0}})");
  REQUIRE(absent);
  CHECK(absent->absent == std::vector<std::uint8_t>{1, 0, 0});
  CHECK(absent->relatives[1] == 1.5);
}

}  // namespace
}  // namespace nightweigh::night::testing

#include <doctest/doctest.h>

#include <nlohmann/json.hpp>

#include "strategies/digest/sha256.h"
#include "tests/unit/daemon/settings/fixtures.h"

namespace nightweigh::settings {
namespace {

TEST_CASE("every default") {
  const Settings settings = good(shortest_settings);
  CHECK(settings.service.data_dir == "/settings/var");
  CHECK(settings.service.http.kind == Endpoint::Kind::tcp);
  CHECK(settings.service.http.address == "127.0.0.1");
  CHECK(settings.service.http.port == 8420);
  CHECK(settings.service.feed_socket.kind == Endpoint::Kind::tcp);
  CHECK(settings.service.feed_socket.address == "127.0.0.1");
  CHECK(settings.service.feed_socket.port == 8421);
  CHECK(settings.service.drop_dir == "/settings/var/drop");
  CHECK(settings.service.outbox_dir.empty());
  CHECK(settings.service.log_level == "info");

  REQUIRE(settings.instruments.size() == 2);
  CHECK(settings.instruments[0].id == "ALDER");
  CHECK(settings.instruments[0].currency == "EUR");
  CHECK(settings.instruments[0].lot_size == Decimal(1));
  CHECK(settings.instruments[0].isin.empty());
  CHECK(settings.instruments[0].mic.empty());

  REQUIRE(settings.books.size() == 1);
  const BookSettings& book = settings.books[0];
  CHECK(book.name == "harbour");
  CHECK(book.currency == "EUR");
  CHECK(book.time_zone == "UTC");
  CHECK(book.start.date.to_string() == "2025-01-02");
  CHECK(book.start.cash == Decimal(1000));
  CHECK(book.start.holdings.empty());
  CHECK_FALSE(book.calendar.any);
  CHECK(book.calendar.closed.empty());
  CHECK_FALSE(book.cash.in_mix);
  CHECK(book.cash.reserve == 0.0);
  CHECK(book.cash.yearly_rate.is_zero());
  CHECK(book.strategy.rule == "exponentiated_gradient");
  CHECK(book.strategy.eta == 0.05);
  CHECK(book.gate.extra_gain == 0.1);
  CHECK(book.gate.payback_days_max == 1260.0);
  CHECK(book.gate.half_life_days == 250.0);
  CHECK_FALSE(book.gate.always);
  REQUIRE(book.costs.size() == 2);
  for (const LineCosts& costs : book.costs) {
    CHECK(costs.commission_bp == Decimal(2));
    CHECK(costs.half_spread_bp == Decimal(3));
  }
  CHECK(book.execution == Execution::assumed);
  CHECK(book.execution_lag_nights == 1);
}

TEST_CASE("the reference settings load, as the book harbour with every default") {
  const auto settings = load(std::filesystem::path(NIGHTWEIGH_SOURCE_DIR) / "config" / "nightweigh.yaml");
  if (!settings) {
    for (const Error& error : settings.error()) MESSAGE(error.message());
  }
  REQUIRE(settings.has_value());
  REQUIRE(settings->books.size() == 1);
  const BookSettings& book = settings->books[0];
  CHECK(book.name == "harbour");
  CHECK(book.time_zone == "Europe/Berlin");
  REQUIRE(book.instruments.size() == 3);
  CHECK(book.instruments[2].id == "COPPER");
  CHECK(book.instruments[2].lot_size == Decimal(10));
  CHECK(book.start.cash == Decimal(1'000'000));
  CHECK(book.costs[0].half_spread_bp == Decimal(3));
  CHECK(book.costs[2].commission_bp == Decimal(2));
  CHECK(book.costs[2].half_spread_bp == Decimal(5));
  // What the file shows as defaults are the defaults.
  const GateSettings gate;
  CHECK(book.gate.extra_gain == gate.extra_gain);
  CHECK(book.gate.payback_days_max == gate.payback_days_max);
  CHECK(book.gate.half_life_days == gate.half_life_days);
  CHECK(book.strategy.eta == StrategySettings().eta);
}

TEST_CASE("every key, at another value than its default") {
  const Settings settings = good(R"(
service:
  data_dir: /var/lib/nightweigh/
  http: unix:http.sock
  feed_socket: "[::1]:0"
  drop_dir: /srv/closes
  outbox_dir: ""
  tokens_file: ""
  log_level: debug
instruments:
  - {id: ALDER, currency: USD, lot_size: 100, isin: XX0000ALDER0, mic: XXXX}
  - {id: 7.B_X-1, currency: USD, lot_size: 0}
books:
  - name: east-2
    currency: USD
    time_zone: America/New_York
    instruments: [7.B_X-1, ALDER]
    start: {date: 2024-02-29, cash: {USD: 12.34}, holdings: {7.B_X-1: "0.00000001", ALDER: "7"}}
    calendar: any
    cash: {in_mix: true, yearly_rate: -0.005}
    strategy: {rule: constant_mix, weights: {CASH: 0.2, ALDER: 0.3, 7.B_X-1: 0.5}}
    gate: {extra_gain: 0, payback_days_max: null, half_life_days: 60.5, always: true}
    costs: {commission_bp: 0, half_spread_bp: 1.5, lines: {ALDER: {commission_bp: 4}}}
    execution: assumed
    execution_lag_nights: 0
)");
  CHECK(settings.service.data_dir == "/var/lib/nightweigh");
  CHECK(settings.service.http.kind == Endpoint::Kind::unix_socket);
  CHECK(settings.service.http.path == "/var/lib/nightweigh/http.sock");
  CHECK(settings.service.feed_socket.address == "::1");
  CHECK(settings.service.feed_socket.port == 0);
  CHECK(settings.service.drop_dir == "/srv/closes");
  CHECK(settings.service.log_level == "debug");
  const BookSettings& book = settings.books.at(0);
  CHECK(book.name == "east-2");
  CHECK(book.instruments[0].id == "7.B_X-1");
  CHECK(book.instruments[0].is_fractional());
  CHECK(book.instruments[1].isin == "XX0000ALDER0");
  CHECK(book.instruments[1].mic == "XXXX");
  CHECK(book.start.cash.to_string() == "12.34");
  CHECK(book.start.holdings.at("7.B_X-1").to_string() == "0.00000001");
  CHECK(book.start.holdings.at("ALDER") == Decimal(7));  // an odd lot
  CHECK(book.calendar.any);
  CHECK(book.cash.in_mix);
  CHECK(book.cash.yearly_rate.to_string() == "-0.005");
  CHECK(book.strategy.weights.at("CASH") == 0.2);
  CHECK(book.gate.extra_gain == 0);
  CHECK_FALSE(book.gate.payback_days_max.has_value());
  CHECK(book.gate.half_life_days == 60.5);
  CHECK(book.gate.always);
  CHECK(book.costs[0].commission_bp.is_zero());
  CHECK(book.costs[0].half_spread_bp.to_string() == "1.5");
  CHECK(book.costs[1].commission_bp == Decimal(4));
  CHECK(book.costs[1].half_spread_bp.to_string() == "1.5");
  CHECK(book.execution_lag_nights == 0);
}

TEST_CASE("features to come may stand at their off values, however these are written") {
  const std::string all = std::string(shortest_settings) + R"(
    calendars: {}
    gate: {horizon_days: auto, full_moves: false, nuisance_fee: 0.0e0}
    costs: {commission_per_share: 0, ticket_min: "0.00", ticket_max: "", duty_buy_bp: 0.0, duty_sell_bp: 0,
            fx_bp: 0.0, impact: {y: 0.0, adv: {}}, lines: {ALDER: {duty_buy_bp: 0}}}
    limits: {max_weight: 1.0, min_weight: 0.0, max_turnover: 1.0, max_order_value: "", max_adv_share: 1, max_drawdown: 1.0}
    checks: {outlier_abs: null, outlier_sd: ~, outlier_floor: , stale_days: null, missing: wait, last_close_days_max: null, cut_off: null}
    review: {approvals: 0, deadline: null}
)";
  const std::string with_strategy =
      with(all, "{rule: exponentiated_gradient}",
           "{rule: exponentiated_gradient, alpha: null, tolerance: null, seed: null, engine: null, "
           "cost_aware: false, "
           "tuned_for_days: null, staged: false, start_weights: null, learn_from: null}");
  CHECK(good(with_strategy).books[0].digest == good(shortest_settings).books[0].digest);
}

TEST_CASE("feed socket and drop folder can be switched off") {
  const Settings settings =
      good(std::string("service: {feed_socket: \"\", drop_dir: \"\"}\n") + shortest_settings);
  CHECK(settings.service.feed_socket.kind == Endpoint::Kind::off);
  CHECK(settings.service.drop_dir.empty());
}

TEST_CASE("the whole of 127.0.0.0/8 is loopback, and nothing beside it") {
  const auto takes = [](const std::string& address) {
    return parse("service: {http: \"" + address + "\"}\n" + shortest_settings, "nightweigh.yaml").has_value();
  };
  for (const char* good_one :
       {"127.0.0.1:1", "127.255.255.255:65535", "127.0.0.0:0", "[::1]:80", "unix:/run/a"}) {
    CAPTURE(good_one);
    CHECK(takes(good_one));
  }
  for (const char* bad_one :
       {"128.0.0.1:1", "126.255.255.255:1", "127.0.0:1", "127.0.0.1.1:1", "127.0.0.256:1", "127.0.0.01:1",
        "0x7f.0.0.1:1", "2130706433:1", "[::]:80", "[127.0.0.1]:80", "[::ffff:127.0.0.1]:80",
        "127.0.0.1:", ":80", "127.0.0.1:+80", "127.0.0.1: 80", "127.0.0.1:080", "[::1]",
        "http://127.0.0.1:80", "127..0.1:1"}) {
    CAPTURE(bad_one);
    CHECK_FALSE(takes(bad_one));
  }
}

TEST_CASE("weights are normalised to sum 1, equal weights are the default") {
  const Settings equal = good(with(shortest_settings, "exponentiated_gradient", "constant_mix"));
  CHECK(equal.books[0].strategy.weights == std::map<std::string, double>{{"ALDER", 0.5}, {"BRINE", 0.5}});
  const Settings near = good(with(shortest_settings, "exponentiated_gradient",
                                  "constant_mix, weights: {ALDER: 0.6666666667, BRINE: 0.3333333332}"));
  const auto& weights = near.books[0].strategy.weights;
  CHECK(weights.at("ALDER") + weights.at("BRINE") == doctest::Approx(1.0).epsilon(1e-16));
  CHECK(weights.at("ALDER") == doctest::Approx(0.6666666667 / 0.9999999999).epsilon(1e-15));
  // Just beyond the tolerance of 1e-9.
  CHECK(bad(with(shortest_settings, "exponentiated_gradient",
                 "constant_mix, weights: {ALDER: 0.5, BRINE: 0.500000002}"))[0]
            .value == "1.0000000020000002");
}

TEST_CASE("a calendar file") {
  const std::filesystem::path folder = std::filesystem::path(NIGHTWEIGH_TEST_DATA) / "settings";
  const std::string text = std::string(shortest_settings) + "    calendar: closed_dates.txt\n";
  const Calendar calendar = good(text, folder / "nightweigh.yaml").books[0].calendar;
  CHECK_FALSE(calendar.any);
  CHECK(calendar.closed ==
        std::set<Date>{*Date::parse("2025-12-25"), *Date::parse("2025-12-26"), *Date::parse("2026-01-01")});
  CHECK(calendar.at_or_after(*Date::parse("2025-12-25")) == *Date::parse("2025-12-29"));
}

TEST_CASE("the order of instruments is that of the book") {
  const Settings settings =
      good(with(shortest_settings, "instruments: [ALDER, BRINE]", "instruments: [BRINE, ALDER]"));
  CHECK(settings.books[0].line_name(0) == "BRINE");
  CHECK(settings.books[0].line_name(1) == "ALDER");
  CHECK(settings.books[0].line_name(2) == "CASH");
}

TEST_CASE("the resolved text is canonical JSON, and the digest its SHA-256") {
  const BookSettings book = good(shortest_settings).books[0];
  CHECK(
      book.resolved_text ==
      R"({"calendar":{"any":false,"closed":[]},"cash":{"in_mix":false,"reserve":0.0,"yearly_rate":"0"},)"
      R"("costs":{"ALDER":{"commission_bp":"2","half_spread_bp":"3"},"BRINE":{"commission_bp":"2","half_spread_bp":"3"}},)"
      R"("currency":"EUR","execution":"assumed","execution_lag_nights":1,)"
      R"("gate":{"always":false,"extra_gain":0.1,"half_life_days":250.0,"payback_days_max":1260.0},)"
      R"("instruments":[{"currency":"EUR","id":"ALDER","isin":"","lot_size":"1","mic":""},)"
      R"({"currency":"EUR","id":"BRINE","isin":"","lot_size":"1","mic":""}],"name":"harbour",)"
      R"("start":{"cash":"1000","date":"2025-01-02","holdings":{}},)"
      R"("strategy":{"eta":0.05,"rule":"exponentiated_gradient"},"time_zone":"UTC"})");
  CHECK(book.digest == sha256_hex(book.resolved_text));
  const auto json = nlohmann::json::parse(book.resolved_text);
  CHECK(json.dump() == book.resolved_text);
}

TEST_CASE("resolve writes weights left out as the equal ones that they stand for") {
  BookSettings book = good(with(shortest_settings, "exponentiated_gradient", "constant_mix")).books[0];
  const std::string digest = book.digest;
  book.strategy.weights.clear();
  resolve(book);
  CHECK(book.digest == digest);
}

TEST_CASE("the digest changes with every key that matters") {
  const std::string base = std::string(shortest_settings) + R"(    currency: EUR
    time_zone: UTC
    calendar: weekdays
    cash: {in_mix: false, reserve: 0, yearly_rate: 0}
    gate: {extra_gain: 0.1, payback_days_max: 1260, half_life_days: 250, always: false}
    costs: {commission_bp: 2, half_spread_bp: 3, lines: {}}
    execution_lag_nights: 1
)";
  const std::vector<std::pair<std::string, std::string>> changes = {
      {"name: harbour", "name: haven"},
      {"time_zone: UTC", "time_zone: Europe/Berlin"},
      {"instruments: [ALDER, BRINE]", "instruments: [BRINE, ALDER]"},
      {"instruments: [ALDER, BRINE]", "instruments: [ALDER]"},
      {"id: ALDER", "id: ALDER, lot_size: 2"},
      {"id: ALDER", "id: ALDER, isin: XX0000ALDER0"},
      {"id: ALDER", "id: ALDER, mic: XXXX"},
      {"2025-01-02", "2025-01-03"},
      {"EUR: \"1000\"", "EUR: \"1000.01\""},
      {"cash: {EUR: \"1000\"}", "cash: {EUR: \"1000\"}, holdings: {ALDER: \"1\"}"},
      {"calendar: weekdays", "calendar: any"},
      {"in_mix: false", "in_mix: true"},
      {"reserve: 0", "reserve: 0.01"},
      {"yearly_rate: 0", "yearly_rate: 0.02"},
      {"rule: exponentiated_gradient", "rule: constant_mix"},
      {"rule: exponentiated_gradient", "rule: buy_and_hold"},
      {"rule: exponentiated_gradient", "rule: exponentiated_gradient, eta: 0.0500001"},
      {"rule: exponentiated_gradient", "rule: constant_mix, weights: {ALDER: 0.4, BRINE: 0.6}"},
      {"extra_gain: 0.1", "extra_gain: 0.2"},
      {"payback_days_max: 1260", "payback_days_max: 1261"},
      {"payback_days_max: 1260", "payback_days_max: null"},
      {"half_life_days: 250", "half_life_days: 251"},
      {"always: false", "always: true"},
      {"commission_bp: 2", "commission_bp: 2.1"},
      {"half_spread_bp: 3", "half_spread_bp: 3.1"},
      {"lines: {}", "lines: {BRINE: {half_spread_bp: 4}}"},
      {"execution_lag_nights: 1", "execution_lag_nights: 0"},
  };
  std::map<std::string, std::string> seen = {{good(base).books[0].digest, "base"}};
  CHECK(good(base).books[0].digest == good(shortest_settings).books[0].digest);
  for (const auto& [from, to] : changes) {
    const std::string digest = good(with(base, from, to)).books[0].digest;
    CAPTURE(to);
    CAPTURE(seen[digest]);
    CHECK(seen[digest].empty());
    seen[digest] = to;
  }
}

TEST_CASE("the digest does not change with service keys, comments, order or spelling") {
  const std::string digest = good(shortest_settings).books[0].digest;
  CHECK(good("service: {http: \"127.0.0.1:9\", log_level: trace}\n" + std::string(shortest_settings))
            .books[0]
            .digest == digest);
  CHECK(good("# a comment\n" + std::string(shortest_settings)).books[0].digest == digest);
  CHECK(
      good(
          R"({"books": [{"execution": "assumed", "strategy": {"eta": 5.0e-2, "rule": "exponentiated_gradient"},
  "start": {"cash": {"EUR": "01000.00"}, "holdings": {"ALDER": "0"}, "date": "2025-01-02"},
  "instruments": ["ALDER", "BRINE"], "name": "harbour", "cash": {"reserve": -0.0}}],
  "instruments": [{"id": "DUNE"}, {"id": "BRINE"}, {"id": "ALDER"}]})")
          .books[0]
          .digest == digest);
}

}  // namespace
}  // namespace nightweigh::settings

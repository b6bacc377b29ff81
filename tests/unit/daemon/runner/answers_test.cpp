#include "daemon/runner/answers.h"

#include <doctest/doctest.h>

#include <boost/asio/co_spawn.hpp>
#include <boost/asio/detached.hpp>
#include <boost/asio/io_context.hpp>
#include <cmath>
#include <optional>

#include "tests/unit/daemon/runner/desk.h"

namespace nightweigh::runner::testing {

using nlohmann::json;

namespace {

// Answers over a desk's database and its published pictures.
class Reader {
 public:
  explicit Reader(Desk& desk) : desk_(desk), answers_(desk.folder().database(), desk.clock()) {
    handler_ = answers_.handler();
  }

  http::Response get(const std::string& path, std::map<std::string, std::string> query = {}) {
    for (const BookSettings& settings : desk_.books()) {
      answers_.publish(std::make_shared<const BookView>(desk_.view(settings.name)));
    }
    http::Request request;
    request.method = "GET";
    request.path = path;
    for (std::size_t at = 1; at <= path.size();) {
      const std::size_t end = std::min(path.find('/', at), path.size());
      request.segments.push_back(path.substr(at, end - at));
      at = end + 1;
    }
    request.query = std::move(query);
    std::optional<http::Response> response;
    auto ask = [this, &request, &response]() -> boost::asio::awaitable<void> {
      boost::asio::awaitable<http::Response> answer = handler_(request);
      response = co_await std::move(answer);
    };
    boost::asio::co_spawn(io_, std::move(ask), boost::asio::detached);
    while (!response) io_.run_one();
    return *response;
  }

  json ok(const std::string& path, std::map<std::string, std::string> query = {}) {
    const http::Response response = get(path, std::move(query));
    REQUIRE(response.status == 200);
    return json::parse(response.body);
  }

  Answers& answers() { return answers_; }

 private:
  Desk& desk_;
  // Outlives the answers: their reader thread lets go of the context's work only after it has answered.
  boost::asio::io_context io_;
  boost::asio::executor_work_guard<boost::asio::io_context::executor_type> work_ =
      boost::asio::make_work_guard(io_);
  Answers answers_;
  http::Handler handler_;
};

void feed_days(Desk& desk, int count) {
  Date date = day("2025-01-02");
  for (int i = 0; i < count; date = date.plus_days(1)) {
    if (date.is_weekend()) continue;
    desk.whole_day(date.to_string(), std::to_string(50 + i % 7), std::to_string(20 + i % 3),
                   std::to_string(80 - i % 5));
    ++i;
  }
}

}  // namespace

TEST_CASE("target before and after the first night") {
  Desk desk({book()});
  Reader reader(desk);
  CHECK(reader.get("/v1/books/harbour/target").status == 404);
  CHECK(reader.get("/v1/books/elsewhere/target").status == 404);
  feed_days(desk, 3);
  const json target = reader.ok("/v1/books/harbour/target");
  CHECK(target["book"] == "harbour");
  CHECK(target["date"] == "2025-01-06");
  CHECK(target["night"] == "/v1/books/harbour/nights/2025-01-06");
  for (const char* key : {"wanted", "held"}) {
    double total = 0;
    for (const auto& [line, weight] : target[key].items()) total += weight.get<double>();
    CHECK(std::abs(total - 1) <= 1e-12);
    CHECK(target[key].contains("CASH"));
  }
  for (const char* key : {"verdict", "stale", "emitted", "numerical_error", "moves_to", "cost_bp",
                          "growth_saved_bp_year", "payback_days", "horizon_days", "reason"}) {
    CHECK_MESSAGE(target.contains(key), key);
  }
}

TEST_CASE("stale: closes wait, or a trading day has passed without them") {
  Desk desk({book()}, "2025-01-06");
  Reader reader(desk);
  feed_days(desk, 3);  // 2, 3 and 6 January
  CHECK(reader.ok("/v1/books/harbour/target")["stale"] == false);
  desk.clock().set(noon("2025-01-07"));
  CHECK(reader.ok("/v1/books/harbour/target")["stale"] == false);  // tonight's closes may still come
  desk.clock().set(noon("2025-01-08"));
  CHECK(reader.ok("/v1/books/harbour/target")["stale"] == true);
  desk.clock().set(noon("2025-01-07"));
  desk.csv("2025-01-07,ALDER,50\n");
  const json state = reader.ok("/v1/books/harbour");
  CHECK(state["stale"] == true);
  CHECK(state["attention"].size() == 2);
}

TEST_CASE("the log pages through every night once, newest first") {
  Desk desk({book()});
  Reader reader(desk);
  feed_days(desk, 25);
  std::vector<std::string> dates;
  std::map<std::string, std::string> query = {{"limit", "10"}};
  for (;;) {
    const http::Response response = reader.get("/v1/books/harbour/log", query);
    REQUIRE(response.status == 200);
    const json page = json::parse(response.body);
    for (const json& row : page["rows"]) dates.push_back(row["date"]);
    if (page["next"].is_null()) {
      CHECK_FALSE(response.headers.contains("Link"));
      break;
    }
    const std::string cursor = page["next"];
    CHECK(response.headers.at("Link") ==
          "</v1/books/harbour/log?limit=10&cursor=" + cursor + ">; rel=\"next\"");
    query["cursor"] = cursor;
  }
  CHECK(dates.size() == 25);
  CHECK(std::is_sorted(dates.rbegin(), dates.rend()));
  CHECK(std::adjacent_find(dates.begin(), dates.end()) == dates.end());
}

TEST_CASE("log rows have the members of the contract; verdict and dates filter") {
  Desk desk({book()});
  Reader reader(desk);
  feed_days(desk, 10);
  const json page = reader.ok("/v1/books/harbour/log");
  for (const char* key : {"date", "verdict", "reason", "growth_saved_bp_year", "cost_bp", "payback_days",
                          "horizon_days", "turnover", "lines", "sheet", "reviewed_by", "batch", "hash"}) {
    CHECK_MESSAGE(page["rows"][0].contains(key), key);
  }
  const json moves = reader.ok("/v1/books/harbour/log", {{"verdict", "move"}});
  for (const json& row : moves["rows"]) {
    CHECK(row["verdict"] == "move");
    CHECK(row["sheet"].is_string());
    CHECK(row["lines"] > 0);
  }
  const json some = reader.ok("/v1/books/harbour/log", {{"from", "2025-01-03"}, {"to", "2025-01-07"}});
  CHECK(some["rows"].size() == 3);
}

TEST_CASE("bad log parameters are answered 400 with the remedy") {
  Desk desk({book()});
  Reader reader(desk);
  for (const auto& [name, value] : std::map<std::string, std::string>{{"limit", "0"},
                                                                      {"from", "soon"},
                                                                      {"verdict", "maybe"},
                                                                      {"cursor", "2025-13-01"},
                                                                      {"colour", "red"}}) {
    const http::Response response = reader.get("/v1/books/harbour/log", {{name, value}});
    CHECK(response.status == 400);
    CHECK(response.content_type == "application/problem+json");
    CHECK(response.body.find(name) != std::string::npos);
  }
}

TEST_CASE("a night's evidence carries hash, sequence, batches and the sheet's state") {
  Desk desk({book()});
  Reader reader(desk);
  feed_days(desk, 1);
  json night = reader.ok("/v1/books/harbour/nights/2025-01-02");
  CHECK(night["hash"] == desk.head());
  CHECK(night["batches"].size() == 1);
  REQUIRE(night["verdict"] == "move");  // all cash: the first sheet always pays
  CHECK(night["sheet"]["state"] == "approved");
  feed_days(desk, 2);
  night = reader.ok("/v1/books/harbour/nights/2025-01-02");
  CHECK(night["sheet"]["state"] == "closed");
  CHECK(reader.get("/v1/books/harbour/nights/2025-01-04").status == 404);
  CHECK(reader.get("/v1/books/harbour/nights/tonight").status == 400);
}

TEST_CASE("health and readiness") {
  Desk desk({book()});
  Reader reader(desk);
  CHECK(reader.get("/healthz").status == 200);
  CHECK(reader.get("/readyz").status == 503);
  reader.answers().set_ready(true);
  CHECK(reader.get("/readyz").status == 200);
  CHECK(reader.ok("/v1/books")["books"].size() == 1);
}

}  // namespace nightweigh::runner::testing

#include "daemon/commands/scenario_market.h"

#include <doctest/doctest.h>
#include <unistd.h>

#include <cmath>
#include <fstream>
#include <map>
#include <numeric>
#include <set>
#include <sstream>

#include "daemon/feed/batch.h"
#include "daemon/settings/settings.h"

using namespace nightweigh;
using namespace nightweigh::commands;

namespace {

// Log of (split * close + dividend) / previous close: the total return as the night will see it.
std::vector<double> log_returns(const ScenarioMarket& market, std::size_t i) {
  std::vector<double> out;
  for (std::size_t day = 1; day < market.dates.size(); ++day) {
    const Close& now = market.at(day, i);
    const double split = now.split ? now.split->to_double() : 1.0;
    const double dividend = now.dividend ? now.dividend->to_double() : 0.0;
    out.push_back(
        std::log((split * now.close.to_double() + dividend) / market.at(day - 1, i).close.to_double()));
  }
  return out;
}

double mean_of(const std::vector<double>& values) {
  return std::accumulate(values.begin(), values.end(), 0.0) / static_cast<double>(values.size());
}

// Mean of products of deviations, `lag` apart.
double co_moment(const std::vector<double>& a, const std::vector<double>& b, std::size_t lag = 0) {
  const double mean_a = mean_of(a), mean_b = mean_of(b);
  double sum = 0.0;
  for (std::size_t t = lag; t < a.size(); ++t) sum += (a[t] - mean_a) * (b[t - lag] - mean_b);
  return sum / static_cast<double>(a.size());
}

double correlation(const std::vector<double>& a, const std::vector<double>& b) {
  return co_moment(a, b) / std::sqrt(co_moment(a, a) * co_moment(b, b));
}

double kurtosis(const std::vector<double>& values) {
  const double mean = mean_of(values), variance = co_moment(values, values);
  double fourth = 0.0;
  for (const double value : values) fourth += std::pow(value - mean, 4);
  return fourth / static_cast<double>(values.size()) / (variance * variance);
}

std::string bytes_of(const std::vector<ScenarioFile>& files) {
  std::string all;
  for (const ScenarioFile& file : files) all += file.path.string() + "\n" + file.bytes;
  return all;
}

std::string read_file(const std::filesystem::path& path) {
  std::ifstream stream(path, std::ios::binary);
  std::ostringstream text;
  text << stream.rdbuf();
  return text.str();
}

class TemporaryFolder {
 public:
  TemporaryFolder() {
    std::string name = (std::filesystem::temp_directory_path() / "nightweigh_scenario_XXXXXX").string();
    path_ = ::mkdtemp(name.data());
  }
  TemporaryFolder(const TemporaryFolder&) = delete;
  TemporaryFolder& operator=(const TemporaryFolder&) = delete;
  ~TemporaryFolder() { std::filesystem::remove_all(path_); }
  const std::filesystem::path& path() const { return path_; }

 private:
  std::filesystem::path path_;
};

}  // namespace

TEST_CASE("the same seed gives the same bytes, another seed others") {
  CHECK(bytes_of(scenario_files(1)) == bytes_of(scenario_files(1)));
  CHECK(bytes_of(scenario_files(1)) != bytes_of(scenario_files(2)));
}

TEST_CASE("three years of weekdays, every instrument on each") {
  const ScenarioMarket market = invent_market(1);
  CHECK(market.instruments ==
        std::vector<std::string>{"ALDER", "BRINE", "COPPER", "DUNE", "EMBER", "FJORD", "GROVE", "HARROW"});
  REQUIRE(market.dates.size() == 780);
  CHECK(market.dates.front().to_string() == "2023-01-02");
  CHECK(market.dates.back().to_string() == "2025-12-26");
  REQUIRE(market.closes.size() == 780 * 8);
  for (std::size_t day = 0; day < market.dates.size(); ++day) {
    CHECK_FALSE(market.dates[day].is_weekend());
    if (day > 0) CHECK(market.dates[day] > market.dates[day - 1]);
    for (std::size_t i = 0; i < 8; ++i) {
      CHECK(market.at(day, i).date == market.dates[day]);
      CHECK(market.at(day, i).instrument == market.instruments[i]);
      CHECK(market.at(day, i).close.is_positive());
      CHECK(market.at(day, i).close.scale() <= 2);
      CHECK(market.at(day, i).revision == 0);
    }
  }
}

TEST_CASE("options move the beginning and the length, and a start on a weekend is moved on") {
  ScenarioOptions options;
  options.first = *Date::parse("2024-06-01");  // a Saturday
  options.nights = 10;
  options.last_days = 3;
  const ScenarioMarket market = invent_market(7, options);
  CHECK(market.dates.front().to_string() == "2024-06-03");
  CHECK(market.dates.size() == 10);
  const auto files = scenario_files(7, options);
  REQUIRE(files.size() == 1 + 1 + 3);
  CHECK(files[1].path == "closes/closes-2024-06.csv");
  CHECK(files[4].path == "last/closes-2024-06-14.json");
}

TEST_CASE("returns look like a market's: fat tails, volatility in clusters, one common factor") {
  // What is asked of the figures: Cont, "Empirical properties of asset returns: stylized facts and
  // statistical issues" (2001), from memory: heavy tails, hardly any linear autocorrelation, absolute
  // returns that stay correlated for weeks. The normal law's kurtosis is 3.
  for (const std::uint64_t seed : {1u, 2u, 3u, 42u}) {
    CAPTURE(seed);
    const ScenarioMarket market = invent_market(seed);
    std::vector<std::vector<double>> returns;
    for (std::size_t i = 0; i < 8; ++i) returns.push_back(log_returns(market, i));
    double kurtosis_sum = 0.0, clustering_sum = 0.0, linear_sum = 0.0, correlation_sum = 0.0;
    for (std::size_t i = 0; i < 8; ++i) {
      kurtosis_sum += kurtosis(returns[i]);
      std::vector<double> sizes;
      for (const double value : returns[i]) {
        sizes.push_back(std::abs(value));
        CHECK(std::abs(value) < 0.25);
      }
      for (std::size_t lag = 1; lag <= 10; ++lag)
        clustering_sum += co_moment(sizes, sizes, lag) / co_moment(sizes, sizes) / 10.0;
      linear_sum += co_moment(returns[i], returns[i], 1) / co_moment(returns[i], returns[i]);
      const double yearly_sd = std::sqrt(252.0 * co_moment(returns[i], returns[i]));
      CHECK(yearly_sd > 0.08);
      CHECK(yearly_sd < 0.45);
      for (std::size_t j = 0; j < i; ++j) correlation_sum += correlation(returns[i], returns[j]) / 28.0;
    }
    CHECK(kurtosis_sum / 8.0 > 4.0);
    CHECK(clustering_sum / 8.0 >
          0.05);  // the standard error of one, without clustering, is 0.036 / sqrt(10 * 8)
    CHECK(std::abs(linear_sum / 8.0) < 0.08);
    CHECK(correlation_sum > 0.15);
    CHECK(correlation_sum < 0.7);
  }
}

TEST_CASE("one split of three for one, and the price divided by three with it") {
  const ScenarioMarket market = invent_market(1);
  int splits = 0;
  for (std::size_t day = 0; day < market.dates.size(); ++day)
    for (std::size_t i = 0; i < 8; ++i) {
      const Close& close = market.at(day, i);
      if (!close.split) continue;
      ++splits;
      CHECK(close.instrument == "EMBER");
      CHECK(*close.split == Decimal(3));
      REQUIRE(day > 0);
      const double ratio = market.at(day - 1, i).close.to_double() / close.close.to_double();
      CHECK(ratio > 2.5);
      CHECK(ratio < 3.5);
      CHECK_FALSE(close.dividend);
    }
  CHECK(splits == 1);
}

TEST_CASE("dividends are positive, in cents, and as often as the instrument pays") {
  const ScenarioMarket market = invent_market(1);
  const std::map<std::string, int> payments_in_three_years = {{"ALDER", 12}, {"BRINE", 6}, {"COPPER", 6},
                                                              {"DUNE", 12},  {"EMBER", 0}, {"FJORD", 6},
                                                              {"GROVE", 12}, {"HARROW", 0}};
  for (std::size_t i = 0; i < 8; ++i) {
    int count = 0;
    std::set<std::string> months;
    for (std::size_t day = 0; day < market.dates.size(); ++day) {
      const Close& close = market.at(day, i);
      if (!close.dividend) continue;
      ++count;
      months.insert(close.date.to_string().substr(0, 7));
      CHECK(close.dividend->is_positive());
      CHECK(close.dividend->scale() <= 2);
      CHECK(close.dividend->to_double() < 0.03 * close.close.to_double());
      CHECK(close.date.to_string().substr(8) >= "10");
      CHECK(close.date.to_string().substr(8) <= "12");
    }
    CAPTURE(market.instruments[i]);
    CHECK(count == payments_in_three_years.at(market.instruments[i]));
    CHECK(static_cast<int>(months.size()) == count);
  }
}

TEST_CASE("the feed reads each row once, as the market has it, months first and then the last five days") {
  const ScenarioMarket market = invent_market(5);
  std::vector<Close> read;
  int monthly = 0, daily = 0;
  for (const ScenarioFile& file : scenario_files(5)) {
    if (file.path == "nightweigh.yaml") continue;
    CAPTURE(file.path.string());
    feed::ParsedBatch batch;
    if (file.path.parent_path() == "closes") {
      ++monthly;
      CHECK(daily == 0);
      batch = feed::parse_csv(file.bytes, feed::Limits{});
    } else {
      CHECK(file.path.parent_path() == "last");
      ++daily;
      REQUIRE(file.bytes.find('\n') == file.bytes.size() - 1);  // one line: one message on the socket
      batch = feed::parse_json(file.bytes.substr(0, file.bytes.size() - 1), feed::Limits{});
    }
    for (const feed::RowError& error : batch.errors) FAIL_CHECK(error.message());
    REQUIRE_FALSE(batch.rows.empty());
    for (const auto& row : batch.rows) {
      const std::string date = row.close.date.to_string();
      CHECK(file.path.stem() == "closes-" + (file.path.extension() == ".csv" ? date.substr(0, 7) : date));
      read.push_back(row.close);
    }
  }
  CHECK(monthly == 36);
  CHECK(daily == 5);
  CHECK(read == market.closes);
}

TEST_CASE("the settings are good settings, with the two books") {
  const ScenarioMarket market = invent_market(1);
  const auto settings = settings::parse(scenario_settings(market, 1), "/invented/nightweigh.yaml");
  if (!settings)
    for (const Error& error : settings.error()) FAIL_CHECK(error.message());
  REQUIRE(settings);
  CHECK(settings->service.data_dir == "/invented/var");
  CHECK(settings->service.http.port == 0);
  CHECK(settings->service.feed_socket.port == 0);
  REQUIRE(settings->books.size() == 2);
  const BookSettings& harbour = settings->books[0];
  CHECK(harbour.name == "harbour");
  CHECK(harbour.strategy.rule == "exponentiated_gradient");
  CHECK(harbour.strategy.eta == 0.05);
  CHECK(harbour.instruments.size() == 8);
  CHECK(harbour.start.cash == Decimal(1'000'000));
  CHECK(harbour.start.date == market.dates.front());
  CHECK(harbour.execution_lag_nights == 1);
  CHECK(harbour.costs[0].commission_bp == Decimal(2));
  CHECK(harbour.costs[0].half_spread_bp == Decimal(3));
  const BookSettings& meadow = settings->books[1];
  CHECK(meadow.name == "meadow");
  CHECK(meadow.strategy.rule == "constant_mix");
  CHECK(meadow.instruments.size() == 5);
  CHECK(meadow.cash.reserve == 0.02);
  CHECK(meadow.start.cash == Decimal(250'000));
}

TEST_CASE("a scenario is written into a new or empty folder, and nowhere else") {
  const TemporaryFolder temporary;
  const auto folder = temporary.path() / "a" / "demo";
  const Result<WrittenScenario> written = write_scenario(folder, 3);
  REQUIRE(written);
  CHECK(written->settings == folder / "nightweigh.yaml");
  CHECK(written->monthly.size() == 36);
  CHECK(written->daily.size() == 5);
  std::size_t count = 0;
  for (const ScenarioFile& file : scenario_files(3)) {
    CHECK(read_file(folder / file.path) == file.bytes);
    ++count;
  }
  CHECK(count == 1 + 36 + 5);
  CHECK(settings::load(folder / "nightweigh.yaml"));

  std::ofstream(folder / "nightweigh.yaml") << "mine";
  const Result<WrittenScenario> again = write_scenario(folder, 3);
  REQUIRE_FALSE(again);
  CHECK(again.error().kind == ErrorKind::conflict);
  CHECK(again.error().message() ==
        folder.string() + ": is not empty; nothing in it is overwritten. Name a new or an empty folder");
  CHECK(read_file(folder / "nightweigh.yaml") == "mine");

  const auto empty = temporary.path() / "empty";
  std::filesystem::create_directory(empty);
  CHECK(write_scenario(empty, 3));
  const Result<WrittenScenario> on_file = write_scenario(folder / "nightweigh.yaml", 3);
  REQUIRE_FALSE(on_file);
  CHECK(on_file.error().problem == "is not a folder");
  const Result<WrittenScenario> below_file = write_scenario(folder / "nightweigh.yaml" / "x", 3);
  REQUIRE_FALSE(below_file);
  CHECK(below_file.error().kind == ErrorKind::storage);
}

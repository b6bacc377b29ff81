// An invented market for demonstrations: closes with fat tails and changing volatility, dividends and a
// split, and the settings of two books that hold it. Everything follows from a seed; nothing here is the
// price of anything.
//
// The model. Daily log return of instrument i, dividend included:
//
//     r_i = drift_i + beta_i s_f exp(h_f / 2 - c_f) e_f + s_i exp(h_i / 2 - c_i) e_i
//
// with e Student t of 5 degrees of freedom scaled to variance 1 and cut off at 5, and log variances that
// follow h <- phi h + sigma z, z normal: the stochastic volatility model of S. J. Taylor, "Financial returns
// modelled by the product of two stochastic processes" (1982) and "Modelling Financial Time Series" (1986);
// cited from memory. c makes the variances' mean 1. One common factor f, one noise of its own for each i.
#pragma once

#include <cstdint>
#include <filesystem>
#include <string>
#include <vector>

#include "daemon/domain/close.h"
#include "daemon/domain/date.h"
#include "daemon/domain/result.h"

namespace nightweigh::commands {

struct ScenarioOptions {
  Date first = Date(std::chrono::sys_days(std::chrono::year{2023} / 1 / 2));  // moved on to a weekday
  std::size_t nights = 780;                                                   // weekdays; three years
  std::size_t last_days = 5;  // of them, kept apart for the socket
};

struct ScenarioMarket {
  std::vector<std::string> instruments;
  std::vector<Date> dates;  // weekdays, ascending
  // closes[day * instruments.size() + i]; prices in whole cents, from 0.01.
  std::vector<Close> closes;

  const Close& at(std::size_t day, std::size_t instrument) const {
    return closes[day * instruments.size() + instrument];
  }
};

// Eight instruments. The same seed and options give the same market on the same machine (the logarithms
// and exponentials are the C library's). O(nights).
ScenarioMarket invent_market(std::uint64_t seed, const ScenarioOptions& options = {});

// CSV as the feed takes it, columns date,instrument,close,dividend,split, of the days with index from <=
// day < to.
std::string closes_csv(const ScenarioMarket& market, std::size_t from, std::size_t to);

// One line of JSON as the socket takes it, without its newline, of one day.
std::string closes_json_line(const ScenarioMarket& market, std::size_t day);

// The settings: books `harbour` (exponentiated gradient over all eight) and `meadow` (constant mix over
// five), free ports, data in ./var.
std::string scenario_settings(const ScenarioMarket& market, std::uint64_t seed);

struct ScenarioFile {
  std::filesystem::path path;  // relative
  std::string bytes;
};

// nightweigh.yaml; closes/closes-2023-01.csv, one a month; last/closes-2025-12-22.json, one a day.
std::vector<ScenarioFile> scenario_files(std::uint64_t seed, const ScenarioOptions& options = {});

struct WrittenScenario {
  std::filesystem::path settings;
  std::vector<std::filesystem::path> monthly;  // in the order of their dates
  std::vector<std::filesystem::path> daily;
};

// Writes those files into a folder, which is created where it is missing. A folder that holds anything is
// refused, and what was written before an error is removed again.
Result<WrittenScenario> write_scenario(const std::filesystem::path& folder, std::uint64_t seed);

}  // namespace nightweigh::commands

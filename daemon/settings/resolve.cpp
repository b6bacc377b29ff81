#include <nlohmann/json.hpp>

#include "daemon/settings/sections.h"
#include "strategies/digest/sha256.h"

namespace nightweigh::settings {

namespace {

// std::map inside: keys come out sorted, whatever the order they were set in.
using nlohmann::json;

json instruments_of(const BookSettings& book) {
  json list = json::array();
  for (const Instrument& instrument : book.instruments) {
    list.push_back({{"id", instrument.id},
                    {"currency", instrument.currency},
                    {"lot_size", instrument.lot_size.to_string()},
                    {"isin", instrument.isin},
                    {"mic", instrument.mic}});
  }
  return list;
}

json start_of(const BookSettings& book) {
  json holdings = json::object();
  for (const auto& [instrument, quantity] : book.start.holdings) holdings[instrument] = quantity.to_string();
  return {
      {"date", book.start.date.to_string()}, {"cash", book.start.cash.to_string()}, {"holdings", holdings}};
}

json calendar_of(const BookSettings& book) {
  json closed = json::array();
  for (const Date date : book.calendar.closed) closed.push_back(date.to_string());
  return {{"any", book.calendar.any}, {"closed", closed}};
}

// Only what the rule uses: another rule's number would change the digest of a book that never reads it.
json strategy_of(const BookSettings& book) {
  json strategy = {{"rule", book.strategy.rule}};
  if (book.strategy.rule == "exponentiated_gradient") strategy["eta"] = book.strategy.eta;
  if (book.strategy.rule == "constant_mix") {
    json weights = json::object();
    const auto lines = mix_lines(book);
    for (const std::string& line : lines) {
      const auto given = book.strategy.weights.find(line);
      const double equal = book.strategy.weights.empty() ? 1.0 / static_cast<double>(lines.size()) : 0.0;
      weights[line] = given == book.strategy.weights.end() ? equal : given->second;
    }
    strategy["weights"] = weights;
  }
  return strategy;
}

json gate_of(const BookSettings& book) {
  const GateSettings& gate = book.gate;
  return {{"extra_gain", gate.extra_gain},
          {"payback_days_max", gate.payback_days_max ? json(*gate.payback_days_max) : json(nullptr)},
          {"half_life_days", gate.half_life_days},
          {"always", gate.always}};
}

json costs_of(const BookSettings& book) {
  json costs = json::object();
  for (std::size_t i = 0; i < book.costs.size(); ++i) {
    costs[book.instruments[i].id] = {{"commission_bp", book.costs[i].commission_bp.to_string()},
                                     {"half_spread_bp", book.costs[i].half_spread_bp.to_string()}};
  }
  return costs;
}

}  // namespace

void resolve(BookSettings& book) {
  const json all = {{"name", book.name},
                    {"currency", book.currency},
                    {"time_zone", book.time_zone},
                    {"instruments", instruments_of(book)},
                    {"start", start_of(book)},
                    {"calendar", calendar_of(book)},
                    {"cash",
                     {{"in_mix", book.cash.in_mix},
                      {"reserve", book.cash.reserve},
                      {"yearly_rate", book.cash.yearly_rate.to_string()}}},
                    {"strategy", strategy_of(book)},
                    {"gate", gate_of(book)},
                    {"costs", costs_of(book)},
                    {"execution", book.execution == Execution::assumed ? "assumed" : "reported"},
                    {"execution_lag_nights", book.execution_lag_nights}};
  book.resolved_text = all.dump();
  book.digest = sha256_hex(book.resolved_text);
}

std::string fixed_key_that_differs(const std::string& before, const std::string& now) {
  const json old = json::parse(before), fresh = json::parse(now);
  for (const char* key : {"start", "currency"}) {
    if (old.at(key) != fresh.at(key)) return key;
  }
  const auto ids = [](const json& book) {
    std::vector<std::string> out;
    for (const json& instrument : book.at("instruments")) out.push_back(instrument.at("id"));
    return out;
  };
  return ids(old) == ids(fresh) ? "" : "instruments";
}

}  // namespace nightweigh::settings

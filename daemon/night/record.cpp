#include "daemon/night/record.h"

#include <cmath>
#include <nlohmann/json.hpp>
#include <stdexcept>

#include "daemon/night/snapshot.h"
#include "strategies/digest/sha256.h"
#include "strategies/numerics/numerics.h"

namespace nightweigh::night {

using nlohmann::json;

namespace {

constexpr double trading_days_a_year = 252.0;

// JSON has no NaN or Infinity; a night that would need one is a bug of ours.
double finite(double value) {
  if (!std::isfinite(value)) throw std::logic_error("a night's figure is not finite");
  return value;
}

json optional_number(const std::optional<double>& value) {
  return value ? json(finite(*value)) : json();
}

json by_line(const std::vector<double>& values, const BookSettings& settings) {
  json out = json::object();
  for (std::size_t line = 0; line < values.size(); ++line)
    out[settings.line_name(line)] = finite(values[line]);
  return out;
}

json dates_json(const std::vector<Date>& dates) {
  json out = json::array();
  for (const Date date : dates) out.push_back(date.to_string());
  return out;
}

json closes_json(const std::vector<Close>& closes) {
  json out = json::array();
  for (const Close& close : closes) {
    json row = {{"instrument", close.instrument},
                {"date", close.date.to_string()},
                {"revision", close.revision},
                {"close", close.close.to_string()}};
    if (close.dividend) row["dividend"] = close.dividend->to_string();
    if (close.split) row["split"] = close.split->to_string();
    out.push_back(std::move(row));
  }
  return out;
}

json rows_json(const std::vector<ledger::Row>& rows, const BookSettings& settings) {
  const int units = minor_units(settings.currency);
  json out = json::array();
  for (const ledger::Row& row : rows) {
    json entry = {{"cause", ledger::name_of(row.cause)}, {"cash", row.cash.to_string_padded(units)}};
    if (row.line) {
      entry["instrument"] = settings.instruments[*row.line].id;
      entry["quantity"] = row.quantity.to_string();
    }
    if (row.price) entry["price"] = row.price->to_string();
    out.push_back(std::move(entry));
  }
  return out;
}

json account_json(const Night& night, const BookSettings& settings) {
  const int units = minor_units(settings.currency);
  json positions = json::object();
  for (std::size_t line = 0; line < settings.instruments.size(); ++line) {
    positions[settings.instruments[line].id] = night.after.account.quantities[line].to_string();
  }
  return {{"cash", {{settings.currency, night.after.account.cash.to_string_padded(units)}}},
          {"positions", std::move(positions)},
          {"net_asset_value", night.evidence.value_after.to_string_padded(units)},
          {"net_asset_value_before_fills", night.evidence.value_before_fills.to_string_padded(units)}};
}

json gate_json(const Evidence& evidence, const BookSettings& settings) {
  json lines = json::array();
  for (std::size_t line = 0; line < settings.line_count(); ++line) {
    json entry = {{"line", settings.line_name(line)},
                  {"wanted", finite(evidence.wanted[line])},
                  {"best_move", finite(evidence.decision.move.weights[static_cast<Eigen::Index>(line)])}};
    if (line < evidence.edges.size()) {
      const gate::Edges& edges = evidence.edges[line];
      entry["no_trade_from"] = optional_number(edges.weight_below);
      entry["no_trade_to"] = optional_number(edges.weight_above);
      entry["way_to_edge"] = finite(edges.way_to_edge);
    }
    lines.push_back(std::move(entry));
  }
  return {{"lines", std::move(lines)},
          {"penalty_scale", finite(evidence.decision.penalty.h)},
          {"certificate", finite(evidence.decision.move.certificate)},
          {"steps", evidence.decision.move.steps},
          {"response", finite(evidence.response)}};
}

json sheet_json(const Evidence& evidence, const BookSettings& settings) {
  if (!evidence.sheet) return json();
  const int units = minor_units(settings.currency);
  json orders = json::array();
  for (const Order& order : evidence.sheet->orders) {
    orders.push_back({{"instrument", settings.instruments[order.line].id},
                      {"side", order.buy ? "buy" : "sell"},
                      {"quantity", order.quantity.to_string()},
                      {"reference_close", order.reference_close.to_string()},
                      {"value", (order.quantity * order.reference_close).to_string_padded(units)},
                      {"estimated_cost", order.estimated_cost.to_string_padded(units)}});
  }
  json sheet = {{"orders", std::move(orders)}};
  sheet["sha256"] = sha256_hex(sheet["orders"].dump());
  return sheet;
}

}  // namespace

std::string canonical_bytes(const Night& night, const BookSettings& settings) {
  const Evidence& evidence = night.evidence;
  const BookState& after = night.after;
  const gate::Worth* worth = evidence.shown_worth();
  // Growth and days: null where there is no candidate, or nothing to measure them by yet.
  const gate::Worth* measured = evidence.saving_is_known ? worth : nullptr;
  const bool has_horizon = measured && measured->horizon_days && *measured->horizon_days > 0;
  json record = {
      {"book", settings.name},
      {"date", night.date.to_string()},
      {"night", after.nights},
      {"settings", settings.digest},
      {"numerics", {{"version", numerics::numerics_version}, {"profile", numerics::profile()}}},
      {"closes", closes_json(evidence.closes)},
      {"relatives", by_line(evidence.relatives, settings)},
      {"held_before", by_line(evidence.held_before, settings)},
      {"held_after", by_line(evidence.held_after, settings)},
      {"wanted", by_line(evidence.wanted, settings)},
      {"numerical_error", by_line(evidence.numerical_error, settings)},
      {"moves_to", evidence.sheet ? by_line(*evidence.moves_to, settings) : json()},
      {"verdict", name_of(evidence.verdict)},
      {"reason", evidence.reason},
      {"cost_bp", worth ? json(finite(1e4 * worth->cost)) : json()},
      {"growth_saved_bp_year",
       measured ? json(finite(1e4 * trading_days_a_year * measured->growth_saved)) : json()},
      {"payback_days", measured ? optional_number(measured->payback_days) : json()},
      {"horizon_days", has_horizon ? optional_number(measured->horizon_days) : json()},
      {"turnover", finite(evidence.turnover)},
      {"lines", evidence.sheet ? evidence.sheet->orders.size() : 0},
      {"gate", gate_json(evidence, settings)},
      {"sheet", sheet_json(evidence, settings)},
      {"filled_sheets", dates_json(evidence.filled_sheets)},
      {"ledger", rows_json(evidence.rows, settings)},
      {"account", account_json(night, settings)},
      {"cost_paid", finite(evidence.cost_paid)},
      {"wealth_net", finite(evidence.value_after.to_double() / after.opening_value.to_double())},
      {"wealth_frictionless", finite(numerics::exp(after.log_wealth_frictionless))},
      {"emitted", after.emitted ? json{{"date", after.emitted->date.to_string()},
                                       {"weights", by_line(after.emitted->weights, settings)}}
                                : json()},
      {"strategy",
       {{"rule", after.strategy->rule()},
        {"days", after.strategy->days()},
        {"state_sha256", sha256_hex(after.strategy->save())}}},
      {"covariation",
       {{"days", after.covariation.days()}, {"state_sha256", sha256_hex(after.covariation.save())}}},
  };
  return record.dump();
}

std::optional<HistoryDay> history_day(const std::string& canonical_bytes) try {
  const json record = json::parse(canonical_bytes, nullptr, false);
  if (!record.is_object() || !record.contains("closes") || !record.contains("relatives")) return std::nullopt;
  const std::optional<Date> date = Date::parse(record.value("date", ""));
  if (!date) return std::nullopt;
  HistoryDay day;
  day.date = *date;
  // The closes stand in the order of the lines; the relatives are keyed by name.
  const json& relatives = record.at("relatives");
  const auto add = [&](const std::string& line) {
    const auto found = relatives.find(line);
    const bool absent = found == relatives.end() || !found->is_number();
    day.relatives.push_back(absent ? 1.0 : found->get<double>());
    day.absent.push_back(absent ? 1 : 0);
  };
  for (const json& close : record.at("closes")) add(close.at("instrument").get<std::string>());
  add(std::string(cash_line));
  return day;
} catch (const json::exception&) {
  return std::nullopt;  // JSON, but not a night's
}

}  // namespace nightweigh::night

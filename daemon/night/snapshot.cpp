#include "daemon/night/snapshot.h"

#include <cmath>
#include <nlohmann/json.hpp>

#include "strategies/digest/sha256.h"
#include "strategies/registry.h"

namespace nightweigh::night {

using nlohmann::json;

namespace {

json order_json(const Order& order, const BookSettings& settings) {
  return {{"instrument", settings.instruments[order.line].id},
          {"buy", order.buy},
          {"quantity", order.quantity.to_string()},
          {"reference_close", order.reference_close.to_string()},
          {"estimated_cost", order.estimated_cost.to_string()}};
}

// Anything that nlohmann's accessors or these helpers throw on becomes one Error in load_snapshot.
struct BadDesk : std::runtime_error {
  using std::runtime_error::runtime_error;
};

Decimal decimal(const json& text) {
  const std::optional<Decimal> value = Decimal::parse(text.get<std::string>(), 36, 36);
  if (!value) throw BadDesk("\"" + text.get<std::string>() + "\" is no decimal number");
  return *value;
}

Date date(const json& text) {
  const std::optional<Date> value = Date::parse(text.get<std::string>());
  if (!value) throw BadDesk("\"" + text.get<std::string>() + "\" is no date");
  return *value;
}

std::size_t line_of(const std::string& instrument, const BookSettings& settings) {
  for (std::size_t line = 0; line < settings.instruments.size(); ++line) {
    if (settings.instruments[line].id == instrument) return line;
  }
  throw BadDesk("the book has no instrument \"" + instrument + "\"");
}

json by_instrument(const std::vector<Decimal>& values, const BookSettings& settings) {
  json out = json::object();
  for (std::size_t line = 0; line < values.size(); ++line) {
    out[settings.instruments[line].id] = values[line].to_string();
  }
  return out;
}

std::vector<Decimal> decimals(const json& object, const BookSettings& settings) {
  if (object.size() != settings.instruments.size()) throw BadDesk("another number of instruments");
  std::vector<Decimal> out(settings.instruments.size());
  for (const auto& [instrument, value] : object.items()) out[line_of(instrument, settings)] = decimal(value);
  return out;
}

std::vector<double> weights(const json& array, const BookSettings& settings) {
  auto out = array.get<std::vector<double>>();
  if (out.size() != settings.line_count()) throw BadDesk("another number of lines");
  double total = 0;
  for (const double weight : out) {
    if (!(weight >= 0)) throw BadDesk("a weight below 0");
    total += weight;
  }
  if (!(std::abs(total - 1) <= 1e-9)) throw BadDesk("weights that do not sum to 1");
  return out;
}

json instrument_ids(const BookSettings& settings) {
  json ids = json::array();
  for (const Instrument& instrument : settings.instruments) ids.push_back(instrument.id);
  return ids;
}

BookState desk_state(const json& desk, const BookSettings& settings) {
  if (desk.at("format").get<int>() != desk_format) throw BadDesk("another format number");
  if (desk.at("book") != settings.name) throw BadDesk("it belongs to the book " + desk.at("book").dump());
  if (desk.at("currency") != settings.currency) throw BadDesk("it is kept in " + desk.at("currency").dump());
  // The weights and the learner's state know lines by their numbers, so the order is part of the meaning.
  if (desk.at("instruments") != instrument_ids(settings)) {
    throw BadDesk("its instruments are " + desk.at("instruments").dump());
  }
  BookState state;
  state.last_night = date(desk.at("date"));
  state.nights = desk.at("nights").get<std::uint64_t>();
  state.account.cash = decimal(desk.at("cash"));
  state.account.quantities = decimals(desk.at("positions"), settings);
  state.closes = decimals(desk.at("closes"), settings);
  state.wanted = weights(desk.at("wanted"), settings);
  state.opening_value = decimal(desk.at("opening_value"));
  state.log_wealth_frictionless = desk.at("log_wealth_frictionless").get<double>();
  if (const json& halted = desk.at("halted"); !halted.is_null()) state.halted = halted.get<std::string>();
  if (const json& pending = desk.at("pending"); !pending.is_null()) {
    Sheet sheet{date(pending.at("date")), {}};
    for (const json& order : pending.at("orders")) {
      sheet.orders.push_back({line_of(order.at("instrument").get<std::string>(), settings),
                              order.at("buy").get<bool>(), decimal(order.at("quantity")),
                              decimal(order.at("reference_close")), decimal(order.at("estimated_cost"))});
    }
    state.pending = std::move(sheet);
  }
  if (const json& emitted = desk.at("emitted"); !emitted.is_null()) {
    state.emitted = Emitted{date(emitted.at("date")), weights(emitted.at("weights"), settings)};
  }
  return state;
}

}  // namespace

SnapshotBytes save_snapshot(const BookState& state, const BookSettings& settings) {
  json pending;
  if (state.pending) {
    pending = {{"date", state.pending->date.to_string()}, {"orders", json::array()}};
    for (const Order& order : state.pending->orders) pending["orders"].push_back(order_json(order, settings));
  }
  json emitted;
  if (state.emitted)
    emitted = {{"date", state.emitted->date.to_string()}, {"weights", state.emitted->weights}};
  std::string covariation = state.covariation.save();
  const json desk = {{"format", desk_format},
                     {"book", settings.name},
                     {"currency", settings.currency},
                     {"instruments", instrument_ids(settings)},
                     {"date", state.last_night.value().to_string()},
                     {"nights", state.nights},
                     {"cash", state.account.cash.to_string()},
                     {"positions", by_instrument(state.account.quantities, settings)},
                     {"closes", by_instrument(state.closes, settings)},
                     {"wanted", state.wanted},
                     {"opening_value", state.opening_value.to_string()},
                     {"log_wealth_frictionless", state.log_wealth_frictionless},
                     {"halted", state.halted ? json(*state.halted) : json()},
                     {"half_life_days", settings.gate.half_life_days},
                     {"covariation_sha256", sha256_hex(covariation)},
                     {"pending", std::move(pending)},
                     {"emitted", std::move(emitted)}};
  return {desk.dump(), state.strategy->save(), std::move(covariation)};
}

Result<LoadedState> load_snapshot(const SnapshotBytes& bytes, const BookSettings& settings) {
  const Error damaged{ErrorKind::corrupted, "book " + settings.name, "its stored state cannot be read", "",
                      "restore the database from a backup"};
  LoadedState loaded;
  double half_life_days = 0;
  std::string covariation_sha256;
  try {
    const json desk = json::parse(bytes.desk);
    loaded.state = desk_state(desk, settings);
    half_life_days = desk.at("half_life_days").get<double>();
    covariation_sha256 = desk.at("covariation_sha256").get<std::string>();
  } catch (const BadDesk& why) {
    Error error = damaged;
    error.value = why.what();
    return failure(error);
  } catch (const json::exception& why) {
    Error error = damaged;
    error.value = why.what();
    return failure(error);
  }

  strategies::Outcome<std::unique_ptr<strategies::Strategy>> strategy =
      strategies::load_strategy(strategy_choice(settings), bytes.strategy);
  if (!strategy) {
    loaded.rebuild_because = strategy.error().problem;
  } else if (half_life_days != settings.gate.half_life_days) {
    loaded.rebuild_because = "the covariation was learned with another half-life";
  } else if (sha256_hex(bytes.covariation) != covariation_sha256 ||
             !gate::Covariation::load(bytes.covariation, loaded.state.covariation) ||
             loaded.state.covariation.size() != settings.line_count()) {
    loaded.rebuild_because = "the covariation's bytes are not readable";
  } else {
    loaded.state.strategy = std::move(*strategy);
  }
  if (!loaded.state.strategy) loaded.state.covariation = gate::Covariation();
  return loaded;
}

}  // namespace nightweigh::night

#include "daemon/commands/night_text.h"

#include "daemon/commands/command.h"

namespace nightweigh::commands {

using nlohmann::json;

namespace {

std::string fixed(const std::string& text, std::size_t digits) { return text.substr(0, digits); }

// What the ledger's rows say of tonight.
std::string ledger_text(const json& rows) {
  if (rows.empty()) return "";
  std::vector<std::vector<std::string>> cells = {{"what", "instrument", ">quantity", ">price", ">cash"}};
  for (const json& row : rows) {
    cells.push_back({row["cause"], row.value("instrument", "-"), row.value("quantity", "-"), row.value("price", "-"),
                     row["cash"]});
  }
  return "\nLedger of the night\n" + table(cells);
}

std::string lines_text(const json& night) {
  std::vector<std::vector<std::string>> cells = {
      {"line", ">close", ">relative", ">held before %", ">held after %", ">wanted %", ">no trade within %",
       ">way to edge"}};
  const auto row = [&](const std::string& line, const std::string& close) {
    std::string band = "-", way = "-";
    for (const json& entry : night["gate"]["lines"]) {
      if (entry["line"] != line || !entry.contains("way_to_edge")) continue;
      const json &from = entry["no_trade_from"], &to = entry["no_trade_to"];
      if (from.is_null() && to.is_null()) continue;
      band = (from.is_null() ? "0" : percent(from, 1)) + " to " + (to.is_null() ? "100" : percent(to, 1));
      way = number(entry["way_to_edge"], 2);
    }
    cells.push_back({line, close, number(night["relatives"][line], 5), percent(night["held_before"][line]),
                     percent(night["held_after"][line]), percent(night["wanted"][line]), band, way});
  };
  for (const json& close : night["closes"]) row(close["instrument"], close["close"]);
  row("CASH", "-");
  return table(cells);
}

}  // namespace

std::string sheet_text(const json& sheet) {
  if (sheet.is_null()) return "";
  std::vector<std::vector<std::string>> cells = {
      {"side", "instrument", ">quantity", ">reference close", ">value", ">estimated cost"}};
  for (const json& order : sheet["orders"]) {
    cells.push_back({order["side"], order["instrument"], order["quantity"], order["reference_close"], order["value"],
                     order["estimated_cost"]});
  }
  const std::string state = sheet.value("state", "");
  return "\nOrder sheet" + (state.empty() ? "" : " (" + state + ")") + "\n" + table(cells) +
         "A proposal for a reviewer: nothing is sent to a market.\n";
}

std::string night_text(const json& night) {
  std::string text = night["book"].get<std::string>() + ", night " + std::to_string(night["night"].get<int>()) +
                     " of " + night["date"].get<std::string>() + "\n\n" + wrapped(night["reason"], "  ") + "\n" +
                     lines_text(night) + sheet_text(night["sheet"]);
  if (night["filled_sheet"].is_string()) {
    text += "\nThe sheet of " + night["filled_sheet"].get<std::string>() + " was filled tonight, before the decision.\n";
  }
  text += ledger_text(night["ledger"]);
  const json& account = night["account"];
  text += "\nNet asset value " + account["net_asset_value"].get<std::string>();
  for (const auto& [currency, cash] : account["cash"].items()) text += " " + currency + ", of it cash " + cash.get<std::string>();
  text += "\nWealth since the start: net of costs " + number(night["wealth_net"], 6) + ", frictionless " +
          number(night["wealth_frictionless"], 6) + "\n";
  text += "Rule " + night["strategy"]["rule"].get<std::string>() + " after " +
          std::to_string(night["strategy"]["days"].get<long>()) + " learned days; settings " +
          fixed(night["settings"], 12) + "; numerics " + std::to_string(night["numerics"]["version"].get<int>()) +
          " (" + night["numerics"]["profile"].get<std::string>() + ")\n";
  if (night.contains("hash")) {
    text += "Journal entry " + std::to_string(night["sequence"].get<long>()) + ", hash " +
            night["hash"].get<std::string>() + "\n";
  }
  return text;
}

}  // namespace nightweigh::commands

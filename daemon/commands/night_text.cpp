#include "daemon/commands/night_text.h"

#include "daemon/commands/command.h"
#include "daemon/domain/decimal.h"

namespace nightweigh::commands {

using nlohmann::json;

namespace {

std::string fixed(const std::string& text, std::size_t digits) {
  return text.substr(0, digits);
}

// Money rounded to cents for reading; the JSON has every digit.
std::string money(const json& amount) {
  const std::optional<Decimal> exact = Decimal::parse(amount.get<std::string>(), 36, 36);
  return exact ? exact->rounded_half_even(2).to_string_padded(2) : amount.get<std::string>();
}

// What the ledger's rows say of tonight.
std::string ledger_text(const json& rows) {
  if (rows.empty()) return "";
  std::vector<std::vector<std::string>> cells = {{"what", "instrument", ">quantity", ">price", ">cash"}};
  for (const json& row : rows) {
    cells.push_back({row["cause"], row.value("instrument", "-"), row.value("quantity", "-"),
                     row.value("price", "-"), row["cash"]});
  }
  return "\nLedger of the night\n" + table(cells);
}

// A night that moves shows where to; one that stays, within which band nothing would trade.
std::string lines_text(const json& night) {
  const bool moves = night["moves_to"].is_object();
  const bool filled = night["held_before"] != night["held_after"];
  std::vector<std::string> head = {"line", ">close", ">relative"};
  if (filled) head.emplace_back(">held before fills %");
  head.insert(head.end(), {">held %", ">wanted %"});
  if (moves) {
    head.emplace_back(">moves to %");
  } else {
    head.insert(head.end(), {">no trade within %", ">way to edge"});
  }
  std::vector<std::vector<std::string>> cells = {head};
  const auto band = [&](const std::string& line, std::vector<std::string>& row) {
    for (const json& entry : night["gate"]["lines"]) {
      if (entry["line"] != line || !entry.contains("way_to_edge")) continue;
      const json &from = entry["no_trade_from"], &to = entry["no_trade_to"];
      if (from.is_null() && to.is_null()) continue;
      row.push_back((from.is_null() ? "0" : percent(from, 1)) + " to " +
                    (to.is_null() ? "100" : percent(to, 1)));
      row.push_back(number(entry["way_to_edge"], 2));
      return;
    }
    row.insert(row.end(), {"-", "-"});
  };
  const auto add = [&](const std::string& line, const std::string& close) {
    std::vector<std::string> row = {line, close, number(night["relatives"][line], 5)};
    if (filled) row.push_back(percent(night["held_before"][line]));
    row.push_back(percent(night["held_after"][line]));
    row.push_back(percent(night["wanted"][line]));
    if (moves) {
      row.push_back(percent(night["moves_to"][line]));
    } else {
      band(line, row);
    }
    cells.push_back(std::move(row));
  };
  for (const json& close : night["closes"]) add(close["instrument"], close["close"]);
  add("CASH", "-");
  return table(cells);
}

}  // namespace

std::string sheet_text(const json& sheet) {
  if (sheet.is_null()) return "";
  std::vector<std::vector<std::string>> cells = {
      {"side", "instrument", ">quantity", ">reference close", ">value", ">estimated cost"}};
  for (const json& order : sheet["orders"]) {
    cells.push_back({order["side"], order["instrument"], order["quantity"], order["reference_close"],
                     order["value"], order["estimated_cost"]});
  }
  const std::string state = sheet.value("state", "");
  return "\nOrder sheet" + (state.empty() ? "" : " (" + state + ")") + "\n" + table(cells) +
         (state == "closed"
              ? "It counts as filled: this version assumes fills, and sends nothing to a market.\n"
              : "A proposal for a reviewer: nothing is sent to a market.\n");
}

std::string night_text(const json& night) {
  std::string text = night["book"].get<std::string>() + ", night " +
                     std::to_string(night["night"].get<int>()) + " of " + night["date"].get<std::string>() +
                     "\n\n" + wrapped(night["reason"], "  ") + "\n" + lines_text(night) +
                     sheet_text(night["sheet"]);
  for (const json& filled : night["filled_sheets"]) {
    text += filled == night["date"]
                ? "\nTonight's sheet counts as filled at tonight's closes, after the decision.\n"
                : "\nThe sheet of " + filled.get<std::string>() +
                      " counts as filled tonight, before the decision.\n";
  }
  text += ledger_text(night["ledger"]);
  const json& account = night["account"];
  text += "\nNet asset value " + money(account["net_asset_value"]);
  for (const auto& [currency, cash] : account["cash"].items())
    text += " " + currency + ", of it cash " + cash.get<std::string>();
  text += "\nWealth since the start: net of costs " + number(night["wealth_net"], 6) + ", frictionless " +
          number(night["wealth_frictionless"], 6) + "\n";
  text += wrapped("Rule " + night["strategy"]["rule"].get<std::string>() + " after " +
                  std::to_string(night["strategy"]["days"].get<long>()) + " learned days; settings " +
                  fixed(night["settings"], 12) + "; numerics " +
                  std::to_string(night["numerics"]["version"].get<int>()) + " (" +
                  night["numerics"]["profile"].get<std::string>() + ")");
  if (night.contains("hash")) {
    text += "Journal entry " + std::to_string(night["sequence"].get<long>()) + ", hash " +
            night["hash"].get<std::string>() + "\n";
  }
  return text;
}

}  // namespace nightweigh::commands

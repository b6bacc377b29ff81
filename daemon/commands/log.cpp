#include <cmath>
#include <iostream>
#include <memory>

#include "daemon/commands/command.h"
#include "daemon/commands/commands.h"

namespace nightweigh::commands {

namespace {

struct Filter {
  std::string from, to, verdict, cursor;
  int limit = 20;
  bool reasons = false;
};

// Whole days, begun ones counted, as in the reason's words.
std::string days(const nlohmann::json& value) {
  return value.is_number() ? number(std::ceil(value.get<double>()), 0) : "-";
}

std::string query(const Filter& filter) {
  std::string text = "?limit=" + std::to_string(filter.limit);
  const auto add = [&](const char* name, const std::string& value) {
    if (!value.empty()) text += std::string("&") + name + "=" + value;
  };
  add("from", filter.from);
  add("to", filter.to);
  add("verdict", filter.verdict);
  add("cursor", filter.cursor);
  return text;
}

int run(const Common& common, const Filter& filter) {
  const std::optional<settings::Settings> settings = settings_or_complain(common);
  if (!settings) return wrong_use;
  const Result<std::string> book = book_name(common, *settings);
  if (!book) return fail(book.error(), wrong_use);
  const Result<std::string> body = ask(*settings, "/v1/books/" + *book + "/log" + query(filter));
  if (!body) return fail(body.error());
  if (common.json) {
    std::cout << *body << "\n";
    return done;
  }
  const nlohmann::json page = nlohmann::json::parse(*body);
  std::vector<std::vector<std::string>> rows = {{"date", "verdict", ">saved bp/y", ">cost bp", ">payback d",
                                                 ">horizon d", ">turnover %", ">lines", "sheet", "hash"}};
  for (const nlohmann::json& row : page["rows"]) {
    rows.push_back({row["date"], row["verdict"], amount(row["growth_saved_bp_year"]), amount(row["cost_bp"]),
                    days(row["payback_days"]), days(row["horizon_days"]), percent(row["turnover"]),
                    number(row["lines"], 0), text_or_dash(row["sheet"]),
                    row["hash"].get<std::string>().substr(0, 12)});
  }
  std::cout << table(rows);
  if (filter.reasons) {
    for (const nlohmann::json& row : page["rows"]) {
      std::cout << "\n" << row["date"].get<std::string>() << "\n" << wrapped(row["reason"], "  ");
    }
  }
  if (page["next"].is_string()) {
    std::cout << "older nights: add --cursor " << page["next"].get<std::string>() << "\n";
  }
  return done;
}

}  // namespace

void add_log(CLI::App& program, int& exit_code) {
  auto common = std::make_shared<Common>();
  auto filter = std::make_shared<Filter>();
  CLI::App* command = program.add_subcommand("log", "the trade log, newest night first");
  add_settings_option(*command, *common);
  add_book_option(*command, *common);
  add_json_option(*command, *common);
  const auto is_date = [](const std::string& text) {
    return Date::parse(text) ? std::string() : text + " is no date; write YYYY-MM-DD";
  };
  command->add_option("--from", filter->from, "first date")->check(is_date);
  command->add_option("--to", filter->to, "last date")->check(is_date);
  command->add_option("--cursor", filter->cursor, "nights before this date")->check(is_date);
  command->add_option("--verdict", filter->verdict, "only these")
      ->check(CLI::IsMember({"move", "stay", "withheld"}));
  command->add_option("--limit", filter->limit, "rows, 1 to 1000")->check(CLI::Range(1, 1000));
  command->add_flag("--reasons", filter->reasons, "the reason of each night under the table");
  command->footer(
      "Example:\n  nightweigh log --settings nightweigh.yaml --book harbour --verdict move --reasons");
  command->callback([common, filter, &exit_code] { exit_code = run(*common, *filter); });
}

}  // namespace nightweigh::commands

#include <iostream>
#include <memory>

#include "daemon/commands/command.h"
#include "daemon/commands/commands.h"
#include "daemon/commands/night_text.h"

namespace nightweigh::commands {

namespace {

int run(const Common& common) {
  const std::optional<settings::Settings> settings = settings_or_complain(common);
  if (!settings) return wrong_use;
  const Result<std::string> book = book_name(common, *settings);
  if (!book) return fail(book.error(), wrong_use);
  const Result<std::string> body = ask(*settings, "/v1/books/" + *book + "/target");
  if (!body) return fail(body.error());
  if (common.json) {
    std::cout << *body << "\n";
    return done;
  }
  const nlohmann::json target = nlohmann::json::parse(*body);
  std::cout << target["book"].get<std::string>() << ", night of " << target["date"].get<std::string>()
            << (target["stale"].get<bool>() ? " (stale)" : "") << "\n";
  for (const nlohmann::json& reason : target["attention"]) std::cout << wrapped(reason, "  ");
  std::cout << "\n" << wrapped(target["reason"], "  ") << "\n";
  const nlohmann::json& emitted = target["emitted"];
  const nlohmann::json& moves_to = target["moves_to"];
  std::vector<std::vector<std::string>> rows = {
      {"line", ">held %", ">wanted %", ">moves to %",
       emitted.is_null() ? ">emitted %" : ">emitted % (" + emitted["date"].get<std::string>() + ")"}};
  for (const auto& [line, held] : target["held"].items()) {
    if (line == "CASH") continue;
    rows.push_back({line, percent(held), percent(target["wanted"][line]),
                    moves_to.is_null() ? "-" : percent(moves_to[line]),
                    emitted.is_null() ? "-" : percent(emitted["weights"][line])});
  }
  rows.push_back({"CASH", percent(target["held"]["CASH"]), percent(target["wanted"]["CASH"]),
                  moves_to.is_null() ? "-" : percent(moves_to["CASH"]),
                  emitted.is_null() ? "-" : percent(emitted["weights"]["CASH"])});
  std::cout << table(rows) << sheet_text(target["sheet"]);
  return done;
}

}  // namespace

void add_target(CLI::App& program, int& exit_code) {
  auto common = std::make_shared<Common>();
  CLI::App* command = program.add_subcommand("target", "what the book wants, holds and moves to");
  add_settings_option(*command, *common);
  add_book_option(*command, *common);
  add_json_option(*command, *common);
  command->footer("Example:\n  nightweigh target --settings nightweigh.yaml --book harbour");
  command->callback([common, &exit_code] { exit_code = run(*common); });
}

}  // namespace nightweigh::commands

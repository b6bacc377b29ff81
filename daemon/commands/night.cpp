#include <iostream>
#include <memory>

#include "daemon/commands/command.h"
#include "daemon/commands/commands.h"
#include "daemon/commands/night_text.h"
#include "daemon/domain/date.h"

namespace nightweigh::commands {

namespace {

int run(const Common& common, const std::string& date) {
  const std::optional<settings::Settings> settings = settings_or_complain(common);
  if (!settings) return wrong_use;
  const Result<std::string> book = book_name(common, *settings);
  if (!book) return fail(book.error(), wrong_use);
  if (!Date::parse(date)) {
    return fail({ErrorKind::bad_input, "DATE", "is no date", shown(date), "write YYYY-MM-DD"}, wrong_use);
  }
  const Result<std::string> body = ask(*settings, "/v1/books/" + *book + "/nights/" + date);
  if (!body) return fail(body.error());
  std::cout << (common.json ? *body + "\n" : night_text(nlohmann::json::parse(*body)));
  return done;
}

}  // namespace

void add_night(CLI::App& program, int& exit_code) {
  auto common = std::make_shared<Common>();
  auto date = std::make_shared<std::string>();
  CLI::App* command = program.add_subcommand("night", "one night's whole evidence: why it moved, or why not");
  add_settings_option(*command, *common);
  add_book_option(*command, *common);
  add_json_option(*command, *common);
  command->add_option("DATE", *date, "the night, YYYY-MM-DD")->required();
  command->footer("Example:\n  nightweigh night --settings nightweigh.yaml --book harbour 2026-03-02");
  command->callback([common, date, &exit_code] { exit_code = run(*common, *date); });
}

}  // namespace nightweigh::commands

#include <CLI/CLI.hpp>
#include <exception>
#include <iostream>
#include <memory>

#include "daemon/app/service.h"
#include "daemon/commands/command.h"
#include "daemon/commands/commands.h"

namespace {

void add_serve(CLI::App& program, int& exit_code) {
  using namespace nightweigh;
  auto common = std::make_shared<commands::Common>();
  CLI::App* command = program.add_subcommand("serve", "run the service until it is told to stop");
  commands::add_settings_option(*command, *common);
  command->add_flag("--json", common->json,
                    "log to standard error; one line of JSON on standard output when ready");
  command->footer("Example:\n  nightweigh serve --settings nightweigh.yaml");
  command->callback([common, &exit_code] {
    const std::optional<settings::Settings> settings = commands::settings_or_complain(*common);
    if (!settings) {
      exit_code = commands::wrong_use;
      return;
    }
    const Result<void> served = app::serve(*settings, common->json);
    if (!served) {
      exit_code =
          commands::fail(served.error(), served.error().kind == ErrorKind::bad_settings ? commands::wrong_use
                                                                                        : commands::refused);
    }
  });
}

}  // namespace

int main(int argc, char** argv) {
  CLI::App program(
      "nightweigh takes the closes of each day, moves the target weights of rule-based books along, and "
      "proposes\n"
      "whole-share orders only when the expected saving outweighs the cost of trading. It never sends an "
      "order.");
  program.require_subcommand(1);
  program.set_version_flag("--version", NIGHTWEIGH_VERSION);
  program.get_formatter()->column_width(28);
  int exit_code = nightweigh::commands::done;
  add_serve(program, exit_code);
  nightweigh::commands::add_inspect(program, exit_code);
  nightweigh::commands::add_feed(program, exit_code);
  nightweigh::commands::add_target(program, exit_code);
  nightweigh::commands::add_log(program, exit_code);
  nightweigh::commands::add_night(program, exit_code);
  nightweigh::commands::add_scenario(program, exit_code);
  try {
    program.parse(argc, argv);
  } catch (const CLI::ParseError& error) {
    // --help and --version come this way too, with exit code 0.
    return program.exit(error) == 0 ? nightweigh::commands::done : nightweigh::commands::wrong_use;
  } catch (const std::exception& error) {
    std::cerr << "nightweigh: a fault of the program: " << error.what() << "\n";
    return nightweigh::commands::refused;
  }
  std::cout.flush();
  if (!std::cout) {
    std::cerr << "nightweigh: standard output cannot be written; is the disk full, or the reader gone?\n";
    return nightweigh::commands::refused;
  }
  return exit_code;
}

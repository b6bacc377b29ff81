// The sub-commands that need nothing of the service's inside, one file each. Each adds itself to the
// program; its callback leaves the exit code in `exit_code`.
#pragma once

#include <CLI/CLI.hpp>

namespace nightweigh::commands {

void add_inspect(CLI::App& program, int& exit_code);
void add_feed(CLI::App& program, int& exit_code);
void add_target(CLI::App& program, int& exit_code);
void add_log(CLI::App& program, int& exit_code);
void add_night(CLI::App& program, int& exit_code);
void add_scenario(CLI::App& program, int& exit_code);

}  // namespace nightweigh::commands

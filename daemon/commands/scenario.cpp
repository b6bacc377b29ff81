#include <iostream>
#include <memory>

#include "daemon/commands/command.h"
#include "daemon/commands/commands.h"
#include "daemon/commands/scenario_market.h"

namespace nightweigh::commands {

namespace {

int run(const std::string& folder, std::uint64_t seed, bool json) {
  const Result<WrittenScenario> written = write_scenario(folder, seed);
  if (!written) return fail(written.error());
  if (json) {
    nlohmann::json out = {{"settings", written->settings.string()}, {"seed", seed}};
    for (const auto& file : written->monthly) out["monthly"].push_back(file.string());
    for (const auto& file : written->daily) out["daily"].push_back(file.string());
    std::cout << out.dump() << "\n";
    return done;
  }
  std::cout << "An invented market from seed " << seed << "; no price in it is the price of anything.\n"
            << "settings      " << written->settings.string() << "\n"
            << "most closes   " << written->monthly.size() << " monthly files, from "
            << written->monthly.front().string() << "\n"
            << "last days     " << written->daily.size() << " daily files, from "
            << written->daily.front().string() << "\n";
  return done;
}

}  // namespace

void add_scenario(CLI::App& program, int& exit_code) {
  struct Options {
    std::string out;
    std::uint64_t seed = 1;
    bool json = false;
  };
  auto options = std::make_shared<Options>();
  CLI::App* command = program.add_subcommand("scenario", "write the invented demo market and its settings");
  command->add_option("--out", options->out, "a new or empty folder")->required();
  command->add_option("--seed", options->seed, "the same seed gives the same market");
  command->add_flag("--json", options->json, "print JSON instead of text");
  command->footer("Example:\n  nightweigh scenario --out demo --seed 7");
  command->callback([options, &exit_code] { exit_code = run(options->out, options->seed, options->json); });
}

}  // namespace nightweigh::commands

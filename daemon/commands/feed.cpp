#include <algorithm>
#include <iostream>
#include <memory>

#include "daemon/commands/command.h"
#include "daemon/commands/commands.h"
#include "daemon/feed/batch_line.h"
#include "daemon/feed/client.h"
#include "daemon/platform/files.h"

namespace nightweigh::commands {

namespace {

// The acknowledgement for people.
void print(const std::string& file, const nlohmann::json& answer) {
  std::cout << file << ": " << answer["status"].get<std::string>() << ", " << answer["rows"] << " new rows\n";
  for (const nlohmann::json& book : answer["books"]) {
    std::cout << "  book " << book["book"].get<std::string>() << ": ";
    const nlohmann::json& dates = book["dates"];
    if (dates.size() > 1) {
      std::cout << dates.size() << " nights, " << dates.front().get<std::string>() << " to "
                << dates.back().get<std::string>() << "\n";
    } else if (dates.size() == 1) {
      std::cout << "night of " << dates.front().get<std::string>() << "\n";
    } else {
      std::cout << "no new night\n";
    }
    for (const nlohmann::json& reason : book["reasons"])
      std::cout << wrapped(reason.get<std::string>(), "    ");
  }
}

void print_errors(const std::string& file, const nlohmann::json& errors) {
  for (const nlohmann::json& error : errors) {
    feed::RowError row;
    row.row = error.value("row", std::size_t{0});
    row.column = error.value("column", "");
    row.value = error.value("value", "");
    row.problem = error.value("problem", "");
    row.remedy = error.value("remedy", "");
    std::cerr << "nightweigh: " << file << ": " << row.message() << "\n";
  }
}

bool is_json(const std::string& file) {
  return file.size() > 5 && file.substr(file.size() - 5) == ".json";
}

int feed_file(const std::string& endpoint, const std::string& file, bool json) {
  const feed::Limits limits;
  Result<std::string> bytes = platform::read_file(file, limits.bytes_max);
  if (!bytes) return fail(bytes.error());
  const feed::BatchLine batch =
      is_json(file) ? feed::json_to_line(*bytes, limits) : feed::csv_to_line(*bytes, limits);
  if (!batch.ok()) {
    for (const feed::RowError& error : batch.errors)
      std::cerr << "nightweigh: " << file << ": " << error.message() << "\n";
    return refused;
  }
  Result<std::string> line = feed::send_line(endpoint, batch.line);
  if (!line) return fail(line.error());
  if (json) std::cout << *line << "\n";
  const nlohmann::json answer = nlohmann::json::parse(*line, nullptr, false);
  if (!answer.is_object()) {
    return fail({ErrorKind::bad_input, endpoint, "answered something that is no acknowledgement",
                 shown(*line), "is it the feed socket of nightweigh?"});
  }
  if (!json) print(file, answer);
  print_errors(file, answer["errors"]);
  // A taken batch after which a book waits wants somebody's attention; a known one tells nothing new.
  const nlohmann::json& books = answer["books"];
  const bool attention = answer["status"] == "taken" &&
                         std::any_of(books.begin(), books.end(),
                                     [](const nlohmann::json& book) { return !book["reasons"].empty(); });
  return answer["status"] == "refused" || attention ? refused : done;
}

int run(const Common& common, const std::vector<std::string>& files) {
  const std::optional<settings::Settings> settings = settings_or_complain(common);
  if (!settings) return wrong_use;
  const Result<RunningEndpoints> endpoints = running_endpoints(*settings);
  if (!endpoints) return fail(endpoints.error());
  if (endpoints->feed.empty()) {
    return fail(
        {ErrorKind::not_found, "service.feed_socket", "is off", "",
         "turn it on in the settings, or move the files into " + settings->service.drop_dir.string()});
  }
  // One refused file does not keep the others from being tried; the exit code tells.
  int worst = done;
  for (const std::string& file : files)
    worst = std::max(worst, feed_file(endpoints->feed, file, common.json));
  return worst;
}

}  // namespace

void add_feed(CLI::App& program, int& exit_code) {
  auto common = std::make_shared<Common>();
  auto files = std::make_shared<std::vector<std::string>>();
  CLI::App* command =
      program.add_subcommand("feed", "send files of closes (CSV or .json) to the running service");
  add_settings_option(*command, *common);
  add_json_option(*command, *common);
  command->add_option("CLOSES", *files, "files, sent in this order, each a batch")->required();
  command->footer("Example:\n  nightweigh feed --settings nightweigh.yaml closes-2026-03-02.csv");
  command->callback([common, files, &exit_code] { exit_code = run(*common, *files); });
}

}  // namespace nightweigh::commands

#include <iostream>
#include <memory>

#include "daemon/commands/command.h"
#include "daemon/commands/commands.h"
#include "daemon/store/store.h"

namespace nightweigh::commands {

namespace {

using nlohmann::json;

std::string endpoint_text(const settings::Endpoint& endpoint) {
  switch (endpoint.kind) {
    case settings::Endpoint::Kind::off:
      return "off";
    case settings::Endpoint::Kind::tcp:
      return endpoint.address + ":" + (endpoint.port == 0 ? "any free port" : std::to_string(endpoint.port));
    case settings::Endpoint::Kind::unix_socket:
      return "unix:" + endpoint.path.string();
  }
  return "";
}

std::string number_text(double value) {
  return json(value).dump();
}

// The rule with its parameters, in words.
std::string rule_text(const BookSettings& book) {
  if (book.strategy.rule == "exponentiated_gradient") {
    return "exponentiated_gradient, eta " + number_text(book.strategy.eta) +
           ": a line that does 1 % better than the mix gains about " + number_text(book.strategy.eta) +
           " % of its own weight that day";
  }
  if (book.strategy.rule == "constant_mix") {
    std::string text = "constant_mix";
    for (const auto& [line, weight] : book.strategy.weights)
      text += ", " + line + " " + percent(weight, 1) + " %";
    return book.strategy.weights.empty() ? text + ", equal weights" : text;
  }
  return book.strategy.rule + ": equal weights at the start, then the market moves them";
}

// Folders that are there must be folders; those that are missing are made at the start of the service.
void inspect_folder(const std::filesystem::path& folder, const char* key, Errors& problems) {
  std::error_code code;
  if (!folder.empty() && std::filesystem::exists(folder, code) &&
      !std::filesystem::is_directory(folder, code)) {
    problems.push_back({ErrorKind::storage, folder.string(), std::string(key) + " is no folder", "",
                        "name a folder, or move the file away"});
  }
}

struct DatabaseReport {
  bool present = false;
  std::map<std::string, store::JournalHead> heads;
  std::map<std::string, std::string> last_nights;
};

DatabaseReport inspect_database(const settings::Settings& settings, Errors& problems) {
  DatabaseReport report;
  const std::filesystem::path file = settings.service.data_dir / "nightweigh.db";
  std::error_code code;
  if (!std::filesystem::exists(file, code)) return report;
  Result<std::unique_ptr<store::Store>> store = store::Store::open(file, store::Store::Mode::read);
  if (!store) {
    problems.push_back(store.error());
    return report;
  }
  report.present = true;
  for (const BookSettings& book : settings.books) {
    Result<store::JournalHead> head = (*store)->head(book.name);
    Result<std::optional<store::Snapshot>> snapshot = (*store)->snapshot(book.name);
    if (!head) problems.push_back(head.error());
    if (!snapshot) problems.push_back(snapshot.error());
    if (head) report.heads[book.name] = *head;
    Result<std::optional<store::JournalEntry>> entry = (*store)->newest(book.name, "settings");
    if (entry && *entry && snapshot && *snapshot) {
      const std::string key = settings::fixed_key_that_differs((*entry)->bytes, book.resolved_text);
      if (!key.empty()) {
        problems.push_back({ErrorKind::bad_settings, "book " + book.name + ", key " + key,
                            "cannot change after the book's first night", "",
                            "set it back, or start a new book under another name"});
      }
    }
    if (snapshot && *snapshot) report.last_nights[book.name] = (*snapshot)->date.to_string();
  }
  return report;
}

int run(const Common& common) {
  const std::optional<settings::Settings> settings = settings_or_complain(common);
  if (!settings) return wrong_use;
  Errors problems;
  inspect_folder(settings->service.data_dir, "service.data_dir", problems);
  inspect_folder(settings->service.drop_dir, "service.drop_dir", problems);
  const DatabaseReport database = inspect_database(*settings, problems);

  json books = json::array();
  for (const BookSettings& book : settings->books) {
    const auto head = database.heads.find(book.name);
    const auto last = database.last_nights.find(book.name);
    books.push_back({{"book", book.name},
                     {"rule", book.strategy.rule},
                     {"instruments", book.instruments.size()},
                     {"settings_sha256", book.digest},
                     {"last_night", last == database.last_nights.end() ? json() : json(last->second)},
                     {"journal_entries", head == database.heads.end() ? 0 : head->second.sequence},
                     {"journal_head", head == database.heads.end() ? json() : json(head->second.hash)}});
  }
  if (common.json) {
    json out = {{"settings", settings->file.string()}, {"database", database.present}, {"books", books}};
    out["problems"] = json::array();
    for (const Error& problem : problems) out["problems"].push_back(problem.message());
    std::cout << out.dump() << "\n";
  } else {
    std::cout << "settings  " << settings->file.string()
              << (problems.empty() ? ": good\n" : ": readable, but see the problems\n") << "http      "
              << endpoint_text(settings->service.http) << "\n"
              << "feed      " << endpoint_text(settings->service.feed_socket) << "\n"
              << "drop      "
              << (settings->service.drop_dir.empty() ? "off" : settings->service.drop_dir.string()) << "\n"
              << "database  " << (settings->service.data_dir / "nightweigh.db").string()
              << (database.present ? "" : " (made at the first start)") << "\n\n";
    for (std::size_t i = 0; i < settings->books.size(); ++i) {
      const BookSettings& book = settings->books[i];
      std::cout << "book " << book.name << ": " << book.instruments.size() << " instruments in "
                << book.currency << ", from " << book.start.date.to_string() << ", fills "
                << (book.execution_lag_nights == 1 ? "assumed at the next night's close"
                                                   : "assumed at the same close")
                << "\n"
                << wrapped("rule " + rule_text(book), "  ") << "  last night "
                << text_or_dash(books[i]["last_night"]) << ", journal head "
                << text_or_dash(books[i]["journal_head"]) << "\n";
    }
  }
  return problems.empty() ? static_cast<int>(done) : fail(problems, refused);
}

}  // namespace

void add_inspect(CLI::App& program, int& exit_code) {
  auto common = std::make_shared<Common>();
  CLI::App* command = program.add_subcommand("inspect", "check the settings, the database and the folders");
  add_settings_option(*command, *common);
  add_json_option(*command, *common);
  command->footer(
      "Every problem is said at once.\nExample:\n  nightweigh inspect --settings nightweigh.yaml");
  command->callback([common, &exit_code] { exit_code = run(*common); });
}

}  // namespace nightweigh::commands

// What the sub-commands share: exit codes, the settings option, the running service, tables for people.
#pragma once

#include <CLI/CLI.hpp>
#include <nlohmann/json.hpp>
#include <optional>
#include <string>
#include <vector>

#include "daemon/domain/result.h"
#include "daemon/settings/settings.h"

namespace nightweigh::commands {

// 0 done; 1 refused, not found, or attention needed; 2 wrong use or bad settings.
enum ExitCode : int { done = 0, refused = 1, wrong_use = 2 };

// Options that most sub-commands take.
struct Common {
  std::string settings_file;
  std::string book;
  bool json = false;
};
void add_settings_option(CLI::App& command, Common& common);
void add_book_option(CLI::App& command, Common& common);
void add_json_option(CLI::App& command, Common& common);

// Prints every error on standard error, one a line, and gives the exit code for it.
int fail(const Error& error, ExitCode code = refused);
int fail(const Errors& errors, ExitCode code);

// The settings, or nullopt after having printed what is wrong with them (exit code wrong_use).
std::optional<settings::Settings> settings_or_complain(const Common& common);
// The book of --book, or the only one; checked against the settings.
Result<std::string> book_name(const Common& common, const settings::Settings& settings);

// Where the running service listens, from data_dir/endpoints.json.
struct RunningEndpoints {
  std::string http, feed;
};
Result<RunningEndpoints> running_endpoints(const settings::Settings& settings);

// GET from the running service: the body of a 200, or the problem document's detail as an Error.
Result<std::string> ask(const settings::Settings& settings, const std::string& target);

// ---- text for people, at most 100 columns
inline constexpr std::size_t columns_max = 100;

// Rows of equal length; the first is the header. Columns whose header starts with '>' are right-aligned.
std::string table(const std::vector<std::vector<std::string>>& rows);
// Broken at spaces to columns_max, each line after `indent`.
std::string wrapped(const std::string& text, const std::string& indent = "");
// Number members of answers; "-" for null and absent ones.
std::string percent(const nlohmann::json& weight, int digits = 2);
std::string number(const nlohmann::json& value, int digits);
// Two significant digits below 0.1, else two decimals: small costs must not look like none.
std::string amount(const nlohmann::json& value);
std::string text_or_dash(const nlohmann::json& value);

}  // namespace nightweigh::commands

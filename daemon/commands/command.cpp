#include "daemon/commands/command.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <cstdio>
#include <iostream>

#include "daemon/http/client.h"
#include "daemon/platform/files.h"

namespace nightweigh::commands {

void add_settings_option(CLI::App& command, Common& common) {
  command.add_option("--settings", common.settings_file, "the settings file")->required();
}

void add_book_option(CLI::App& command, Common& common) {
  command.add_option("--book", common.book, "the book; may be left out where there is only one");
}

void add_json_option(CLI::App& command, Common& common) {
  command.add_flag("--json", common.json, "print JSON instead of text");
}

int fail(const Error& error, ExitCode code) {
  std::cerr << "nightweigh: " << error.message() << "\n";
  return code;
}

int fail(const Errors& errors, ExitCode code) {
  for (const Error& error : errors) fail(error, code);
  return code;
}

std::optional<settings::Settings> settings_or_complain(const Common& common) {
  ResultOrErrors<settings::Settings> settings = settings::load(common.settings_file);
  if (settings) return std::move(*settings);
  fail(settings.error(), wrong_use);
  return std::nullopt;
}

Result<std::string> book_name(const Common& common, const settings::Settings& settings) {
  std::string names;
  for (const BookSettings& book : settings.books) {
    if (book.name == common.book) return common.book;
    names += (names.empty() ? "" : ", ") + book.name;
  }
  if (common.book.empty() && settings.books.size() == 1) return settings.books.front().name;
  return failure({ErrorKind::not_found, "--book",
                  common.book.empty() ? "which book is meant is not said" : "there is no such book",
                  common.book, "the settings have: " + names});
}

Result<RunningEndpoints> running_endpoints(const settings::Settings& settings) {
  const std::filesystem::path file = settings.service.data_dir / "endpoints.json";
  constexpr std::size_t bytes_max = 64 << 10;
  Result<std::string> text = platform::read_file(file, bytes_max);
  if (!text) {
    return failure({ErrorKind::not_found, file.string(),
                    "the service does not seem to run with these settings", "",
                    "start it with: nightweigh serve --settings " + settings.file.string()});
  }
  const nlohmann::json endpoints = nlohmann::json::parse(*text, nullptr, false);
  if (!endpoints.is_object() || !endpoints.contains("http") || !endpoints["http"].is_string()) {
    return failure({ErrorKind::corrupted, file.string(), "is not what the service writes there", shown(*text),
                    "restart the service"});
  }
  return RunningEndpoints{endpoints["http"], endpoints.value("feed", "")};
}

Result<std::string> ask(const settings::Settings& settings, const std::string& target) {
  Result<RunningEndpoints> endpoints = running_endpoints(settings);
  if (!endpoints) return failure(endpoints.error());
  Result<http::Answer> answer = http::get(endpoints->http, target);
  if (!answer) return failure(answer.error());
  if (answer->status == 200) return std::move(answer->body);
  const nlohmann::json problem = nlohmann::json::parse(answer->body, nullptr, false);
  const std::string detail = problem.is_object() ? problem.value("detail", "") : shown(answer->body);
  return failure({answer->status == 404 ? ErrorKind::not_found : ErrorKind::bad_input, target,
                  detail.empty() ? "the service answered " + std::to_string(answer->status) : detail, "",
                  ""});
}

namespace {

// Columns that a UTF-8 text takes on a terminal, one a code point.
std::size_t width(const std::string& text) {
  return static_cast<std::size_t>(std::count_if(
      text.begin(), text.end(), [](char c) { return (static_cast<unsigned char>(c) & 0xC0) != 0x80; }));
}

}  // namespace

std::string table(const std::vector<std::vector<std::string>>& rows) {
  if (rows.empty()) return "";
  std::vector<bool> right;
  std::vector<std::vector<std::string>> cells = rows;
  for (std::string& head : cells.front()) {
    right.push_back(!head.empty() && head.front() == '>');
    if (right.back()) head.erase(0, 1);
  }
  std::vector<std::size_t> widths(right.size(), 0);
  for (const auto& row : cells) {
    for (std::size_t i = 0; i < row.size(); ++i) widths[i] = std::max(widths[i], width(row[i]));
  }
  std::string out;
  for (const auto& row : cells) {
    std::string line;
    for (std::size_t i = 0; i < row.size(); ++i) {
      const std::string padding(widths[i] - width(row[i]), ' ');
      if (i > 0) line += "  ";
      line += right[i] ? padding + row[i] : row[i] + padding;
    }
    line.erase(line.find_last_not_of(' ') + 1);
    out += line + "\n";
  }
  return out;
}

std::string wrapped(const std::string& text, const std::string& indent) {
  std::string out, line = indent;
  for (std::size_t at = 0; at < text.size();) {
    const std::size_t end = std::min(text.find(' ', at), text.size());
    const std::string word = text.substr(at, end - at);
    if (line.size() > indent.size() && width(line) + 1 + width(word) > columns_max) {
      out += line + "\n";
      line = indent;
    }
    if (line.size() > indent.size()) line += " ";
    line += word;
    at = end + 1;
  }
  return out + line + "\n";
}

std::string number(const nlohmann::json& value, int digits) {
  if (!value.is_number()) return "-";
  std::array<char, 64> text{};
  std::snprintf(text.data(), text.size(), "%.*f", digits, value.get<double>());
  return text.data();
}

std::string amount(const nlohmann::json& value) {
  if (!value.is_number()) return "-";
  const double figure = value.get<double>();
  if (figure == 0 || std::abs(figure) >= 0.1) return number(value, 2);
  std::array<char, 64> text{};
  std::snprintf(text.data(), text.size(), "%.2g", figure);
  return text.data();
}

std::string percent(const nlohmann::json& weight, int digits) {
  if (!weight.is_number()) return "-";
  return number(100 * weight.get<double>(), digits);
}

std::string text_or_dash(const nlohmann::json& value) {
  return value.is_string() ? value.get<std::string>() : std::string("-");
}

}  // namespace nightweigh::commands

#include <string_view>

#include "daemon/settings/sections.h"

namespace nightweigh::settings {

namespace {

// One closed date a line; # begins a comment; empty lines are passed over.
void read_closed_dates(const std::string& text, const std::filesystem::path& file, Position named_at,
                       Calendar& calendar, Problems& problems) {
  std::string_view rest = text;
  for (int line = 1; !rest.empty(); ++line) {
    const std::size_t end = rest.find('\n');
    std::string_view entry = rest.substr(0, end);
    rest = end == std::string_view::npos ? std::string_view() : rest.substr(end + 1);
    entry = entry.substr(0, entry.find('#'));
    while (!entry.empty() && std::string_view(" \t\r").find(entry.back()) != std::string_view::npos) {
      entry.remove_suffix(1);
    }
    while (!entry.empty() && (entry.front() == ' ' || entry.front() == '\t')) entry.remove_prefix(1);
    if (entry.empty()) continue;
    if (const auto date = Date::parse(entry)) {
      calendar.closed.insert(*date);
    } else {
      problems.add_elsewhere(named_at, {ErrorKind::bad_settings, file.string() + ":" + std::to_string(line),
                                        "is not a date", shown(std::string(entry)),
                                        "write one closed date a line, like 2025-12-25; # begins a comment"});
    }
  }
}

}  // namespace

Calendar read_calendar(const Value& value, const Context& context) {
  Calendar calendar;
  const std::string remedy = "write weekdays, any, or the path of a file with one closed date a line";
  const auto text = read_text(value, context.problems, remedy);
  if (!text || *text == "weekdays") return calendar;
  if (*text == "any") {
    calendar.any = true;
    return calendar;
  }
  if (text->empty()) {
    refuse(context.problems, value, "names no file", remedy);
    return calendar;
  }
  const std::filesystem::path file = (context.folder / *text).lexically_normal();
  const auto content = read_small_file(file);
  if (!content) {
    refuse(context.problems, value, "names a calendar file that " + content.error().problem, remedy);
    return calendar;
  }
  read_closed_dates(*content, file, value.node->at, calendar, context.problems);
  return calendar;
}

}  // namespace nightweigh::settings

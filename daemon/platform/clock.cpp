#include "daemon/platform/clock.h"

#include <date/tz.h>

#include <array>
#include <cstdio>
#include <exception>
#include <stdexcept>

namespace nightweigh::platform {

namespace {

// nullptr where the machine has no such zone, or no zone database at all.
const date::time_zone* find_zone(const std::string& name) {
  // right/ counts leap seconds, which no clock here does; posix/ repeats the plain names.
  if (name.empty() || name.starts_with("right/") || name.starts_with("posix/")) return nullptr;
  try {
    return date::locate_zone(name);
  } catch (const std::exception&) {
    return nullptr;
  }
}

}  // namespace

std::chrono::sys_time<std::chrono::microseconds> SystemClock::now() const {
  return std::chrono::floor<std::chrono::microseconds>(std::chrono::system_clock::now());
}

bool is_time_zone(const std::string& name) {
  const date::time_zone* zone = find_zone(name);
  if (zone == nullptr) return false;
  try {
    zone->get_info(date::sys_seconds{});  // the zone's file is read at its first use; a damaged one throws
    return true;
  } catch (const std::exception&) {
    return false;
  }
}

Date date_in_zone(std::chrono::sys_time<std::chrono::microseconds> at, const std::string& name) {
  const date::time_zone* zone = find_zone(name);
  if (zone == nullptr) throw std::logic_error("date_in_zone: the settings let an unknown time zone through");
  const auto local = zone->to_local(at);
  return Date(std::chrono::sys_days(std::chrono::floor<std::chrono::days>(local.time_since_epoch())));
}

std::string to_iso(std::chrono::sys_time<std::chrono::microseconds> at) {
  const auto day = std::chrono::floor<std::chrono::days>(at);
  const std::chrono::year_month_day date(day);
  const std::chrono::hh_mm_ss time(at - day);
  std::array<char, 64> text{};
  std::snprintf(text.data(), text.size(), "%04d-%02u-%02uT%02d:%02d:%02d.%06dZ",
                static_cast<int>(date.year()), static_cast<unsigned>(date.month()),
                static_cast<unsigned>(date.day()), static_cast<int>(time.hours().count()),
                static_cast<int>(time.minutes().count()), static_cast<int>(time.seconds().count()),
                static_cast<int>(time.subseconds().count()));
  return text.data();
}

}  // namespace nightweigh::platform

#include "daemon/platform/clock.h"

#include <doctest/doctest.h>

namespace nightweigh::platform {
namespace {

using Instant = std::chrono::sys_time<std::chrono::microseconds>;

Instant at(const char* date, int hours, int minutes, int seconds = 0) {
  return Date::parse(date)->days() + std::chrono::hours(hours) + std::chrono::minutes(minutes) +
         std::chrono::seconds(seconds);
}

TEST_CASE("known and unknown time zones") {
  for (const char* name : {"UTC", "Europe/Berlin", "America/New_York", "Asia/Kolkata", "Pacific/Apia"}) {
    CAPTURE(name);
    CHECK(is_time_zone(name));
  }
  for (const char* name : {"", "Europe/Nowhere", "europe/berlin", "Berlin", "UTC ", "../UTC", "/etc/passwd",
                           "+01:00", "right/UTC", "posix/UTC"}) {
    CAPTURE(name);
    CHECK_FALSE(is_time_zone(name));
  }
}

TEST_CASE("the date in Europe/Berlin across daylight saving of 2025") {
  // IANA database, rule EU: +01:00, from 2025-03-30 01:00 UTC +02:00, from 2025-10-26 01:00 UTC +01:00 again.
  const std::string zone = "Europe/Berlin";
  CHECK(date_in_zone(at("2025-03-29", 22, 59, 59), zone).to_string() == "2025-03-29");
  CHECK(date_in_zone(at("2025-03-29", 23, 0), zone).to_string() == "2025-03-30");
  CHECK(date_in_zone(at("2025-03-30", 21, 59, 59), zone).to_string() == "2025-03-30");
  CHECK(date_in_zone(at("2025-03-30", 22, 0), zone).to_string() == "2025-03-31");
  CHECK(date_in_zone(at("2025-10-25", 21, 59, 59), zone).to_string() == "2025-10-25");
  CHECK(date_in_zone(at("2025-10-25", 22, 0), zone).to_string() == "2025-10-26");
  CHECK(date_in_zone(at("2025-10-26", 22, 59, 59), zone).to_string() == "2025-10-26");
  CHECK(date_in_zone(at("2025-10-26", 23, 0), zone).to_string() == "2025-10-27");
}

TEST_CASE("the date in America/New_York across daylight saving of 2025") {
  // IANA database, rule US: -05:00, from 2025-03-09 07:00 UTC -04:00, from 2025-11-02 06:00 UTC -05:00 again.
  const std::string zone = "America/New_York";
  CHECK(date_in_zone(at("2025-03-09", 4, 59, 59), zone).to_string() == "2025-03-08");
  CHECK(date_in_zone(at("2025-03-09", 5, 0), zone).to_string() == "2025-03-09");
  CHECK(date_in_zone(at("2025-03-10", 3, 59, 59), zone).to_string() == "2025-03-09");
  CHECK(date_in_zone(at("2025-03-10", 4, 0), zone).to_string() == "2025-03-10");
  CHECK(date_in_zone(at("2025-11-02", 3, 59, 59), zone).to_string() == "2025-11-01");
  CHECK(date_in_zone(at("2025-11-02", 4, 0), zone).to_string() == "2025-11-02");
  CHECK(date_in_zone(at("2025-11-03", 4, 59, 59), zone).to_string() == "2025-11-02");
  CHECK(date_in_zone(at("2025-11-03", 5, 0), zone).to_string() == "2025-11-03");
}

TEST_CASE("zones far from the meridian, and instants before the epoch") {
  CHECK(date_in_zone(at("2025-06-01", 10, 0), "Pacific/Kiritimati").to_string() == "2025-06-02");  // +14:00
  CHECK(date_in_zone(at("2025-06-01", 10, 0), "Pacific/Pago_Pago").to_string() == "2025-05-31");   // -11:00
  CHECK(date_in_zone(at("1969-12-31", 23, 59, 59), "UTC").to_string() == "1969-12-31");
  CHECK_THROWS_AS(date_in_zone(at("2025-06-01", 10, 0), "Europe/Nowhere"), std::logic_error);
}

TEST_CASE("instants as text") {
  CHECK(to_iso(at("2026-03-02", 21, 14, 5) + std::chrono::microseconds(123456)) ==
        "2026-03-02T21:14:05.123456Z");
  CHECK(to_iso(at("2026-03-02", 0, 0)) == "2026-03-02T00:00:00.000000Z");
  CHECK(to_iso(at("1970-01-01", 0, 0) - std::chrono::microseconds(1)) == "1969-12-31T23:59:59.999999Z");
}

TEST_CASE("clocks") {
  const SystemClock system;
  const auto first = system.now();
  CHECK(system.now() >= first);
  CHECK(first > at("2020-01-01", 0, 0));
  CHECK(first < at("2190-01-01", 0, 0));
  FixedClock fixed(at("2025-01-02", 0, 0));
  CHECK(fixed.now() == at("2025-01-02", 0, 0));
  fixed.set(at("2024-01-02", 0, 0));
  CHECK(fixed.now() == at("2024-01-02", 0, 0));
}

}  // namespace
}  // namespace nightweigh::platform

#include "daemon/domain/date.h"

#include <doctest/doctest.h>

#include "daemon/domain/calendar.h"

namespace nightweigh {
namespace {

Date date(const char* text) {
  const auto value = Date::parse(text);
  REQUIRE_MESSAGE(value.has_value(), text);
  return *value;
}

TEST_CASE("ISO 8601 calendar dates, strictly") {
  for (const char* text :
       {"1900-01-01", "2199-12-31", "2024-02-29", "2000-02-29", "2025-12-31", "1970-01-01"}) {
    CAPTURE(text);
    CHECK(date(text).to_string() == text);
  }
  for (const char* text :
       {"1899-12-31", "2200-01-01", "2025-02-29",       "1900-02-29",  "2100-02-29",  "2025-04-31",
        "2025-00-10", "2025-13-01", "2025-01-00",       "2025-01-32",  "2025-1-02",   "25-01-02",
        "2025/01/02", "20250102",   "2025-01-02T00:00", " 2025-01-02", "2025-01-02 ", "2025-W01-1",
        "2025-001",   "",           "-025-01-02",       "+025-01-02",  "2025-01-0x",  "2025--1-02"}) {
    CAPTURE(text);
    CHECK_FALSE(Date::parse(text).has_value());
  }
}

TEST_CASE("every day from 1900 to 2199 reads back, and none is missing") {
  // Gregorian rule: 300 years with 73 leap days (1900, 2100 have none; 2000 has).
  Date day = date("1900-01-01");
  int count = 0, leap_days = 0;
  for (; day <= date("2199-12-31"); day = day.plus_days(1)) {
    const auto back = Date::parse(day.to_string());
    if (!back || *back != day) FAIL(day.to_string());
    if (day.to_string().ends_with("-02-29")) ++leap_days;
    ++count;
  }
  CHECK(leap_days == 73);
  CHECK(count == 300 * 365 + 73);
}

TEST_CASE("weekdays") {
  // ISO 8601:2004 counts 2000-01-01 as a Saturday.
  CHECK(date("2000-01-01").is_weekend());
  CHECK(date("2000-01-02").is_weekend());
  CHECK_FALSE(date("2000-01-03").is_weekend());
  CHECK_FALSE(date("1999-12-31").is_weekend());
  CHECK(date("1900-01-06").is_weekend());
}

TEST_CASE("days between and order") {
  CHECK(date("2024-03-01").days_since(date("2024-02-28")) == 2);
  CHECK(date("2023-03-01").days_since(date("2023-02-28")) == 1);
  CHECK(date("2024-02-28").days_since(date("2024-03-01")) == -2);
  CHECK(date("2025-12-31").plus_days(1) == date("2026-01-01"));
  CHECK(date("2025-01-02") < date("2025-01-10"));
  CHECK(Date() == date("1970-01-01"));
}

TEST_CASE("trading days") {
  Calendar calendar;
  calendar.closed = {date("2025-12-25"), date("2025-12-26"), date("2025-12-27")};
  CHECK(calendar.is_trading_day(date("2025-12-24")));
  CHECK_FALSE(calendar.is_trading_day(date("2025-12-25")));
  CHECK_FALSE(calendar.is_trading_day(date("2025-12-28")));  // a Sunday
  CHECK(calendar.at_or_after(date("2025-12-24")) == date("2025-12-24"));
  CHECK(calendar.at_or_after(date("2025-12-25")) == date("2025-12-29"));
  calendar.any = true;
  CHECK(calendar.is_trading_day(date("2025-12-25")));
  CHECK(calendar.is_trading_day(date("2025-12-28")));
  CHECK_FALSE(calendar.at_or_after(date("2025-12-24")).has_value());
}

}  // namespace
}  // namespace nightweigh

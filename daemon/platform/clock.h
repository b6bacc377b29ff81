// Wall time, injected so that tests can set it. It decides only what is "future" and when alarms ring;
// never what a night contains.
#pragma once

#include <chrono>
#include <string>

#include "daemon/domain/date.h"

namespace nightweigh::platform {

class Clock {
 public:
  virtual ~Clock() = default;
  // Microseconds since the epoch, UTC.
  virtual std::chrono::sys_time<std::chrono::microseconds> now() const = 0;
};

class SystemClock final : public Clock {
 public:
  std::chrono::sys_time<std::chrono::microseconds> now() const override;
};

// For tests: stands still until moved.
class FixedClock final : public Clock {
 public:
  explicit FixedClock(std::chrono::sys_time<std::chrono::microseconds> at) : at_(at) {}
  std::chrono::sys_time<std::chrono::microseconds> now() const override { return at_; }
  void set(std::chrono::sys_time<std::chrono::microseconds> at) { at_ = at; }

 private:
  std::chrono::sys_time<std::chrono::microseconds> at_;
};

// Whether the IANA time zone database of this machine has the name.
bool is_time_zone(const std::string& name);

// The calendar date in that zone at that instant. Precondition: is_time_zone(name).
Date date_in_zone(std::chrono::sys_time<std::chrono::microseconds> at, const std::string& name);

// 2026-03-02T21:14:05.123456Z
std::string to_iso(std::chrono::sys_time<std::chrono::microseconds> at);

}  // namespace nightweigh::platform

// Calendar dates. A night's identity is a date, never an instant; instants live in the platform folder.
#pragma once

#include <chrono>
#include <compare>
#include <optional>
#include <string>
#include <string_view>

namespace nightweigh {

class Date {
 public:
  Date() = default;  // 1970-01-01
  explicit Date(std::chrono::sys_days days) : days_(days) {}

  // Strict ISO 8601 calendar date, YYYY-MM-DD, years 1900 to 2199; anything else is nullopt.
  static std::optional<Date> parse(std::string_view text);

  std::string to_string() const;  // YYYY-MM-DD
  bool is_weekend() const;
  Date plus_days(int days) const { return Date(days_ + std::chrono::days(days)); }
  int days_since(Date earlier) const { return static_cast<int>((days_ - earlier.days_).count()); }
  std::chrono::sys_days days() const { return days_; }

  friend auto operator<=>(const Date&, const Date&) = default;

 private:
  std::chrono::sys_days days_{};
};

}  // namespace nightweigh

// Settings texts that the tests change in one place.
#pragma once

#include <doctest/doctest.h>

#include <string>

#include "daemon/settings/settings.h"

namespace nightweigh::settings {

// The shortest good settings: one book, every default.
inline const char* const shortest_settings = R"(instruments:
  - {id: ALDER}
  - {id: BRINE}
books:
  - name: harbour
    instruments: [ALDER, BRINE]
    start: {date: 2025-01-02, cash: {EUR: "1000"}}
    strategy: {rule: exponentiated_gradient}
    execution: assumed
)";

// `text` with its only `from` replaced.
inline std::string with(const std::string& text, const std::string& from, const std::string& to) {
  const std::size_t at = text.find(from);
  REQUIRE(at != std::string::npos);
  REQUIRE(text.find(from, at + 1) == std::string::npos);
  return text.substr(0, at) + to + text.substr(at + from.size());
}

inline Settings good(const std::string& text,
                     const std::filesystem::path& file = "/settings/nightweigh.yaml") {
  auto settings = parse(text, file);
  if (!settings) {
    for (const Error& error : settings.error()) MESSAGE(error.message());
  }
  REQUIRE(settings.has_value());
  return *settings;
}

inline Errors bad(const std::string& text) {
  const auto settings = parse(text, "nightweigh.yaml");
  REQUIRE_FALSE(settings.has_value());
  REQUIRE_FALSE(settings.error().empty());
  return settings.error();
}

}  // namespace nightweigh::settings

// A night's evidence in words and tables.
#pragma once

#include <nlohmann/json.hpp>
#include <string>

namespace nightweigh::commands {

// The orders of a sheet as a table under a heading; empty for a null sheet.
std::string sheet_text(const nlohmann::json& sheet);

// The whole evidence of one night.
std::string night_text(const nlohmann::json& night);

}  // namespace nightweigh::commands

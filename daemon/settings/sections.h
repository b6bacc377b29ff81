// The sections of the settings file, one reader each. All report what is wrong to `problems` and return
// what they could read; the result counts only where nothing was reported.
#pragma once

#include <filesystem>
#include <map>
#include <optional>
#include <string>
#include <vector>

#include "daemon/settings/settings.h"
#include "daemon/settings/values.h"

namespace nightweigh::settings {

// Every id that the file defines; nullopt where the definition itself has been refused.
using InstrumentTable = std::map<std::string, std::optional<Instrument>>;

struct Context {
  Problems& problems;
  std::filesystem::path folder;  // of the settings file, absolute
};

ServiceSettings read_service(MapReader service, const Context& context);

std::vector<Instrument> read_instruments(const Value& list, InstrumentTable& table, const Context& context);

std::vector<BookSettings> read_books(const Value& list, const InstrumentTable& table, const Context& context);

// weekdays, any, or a file with one closed date a line.
Calendar read_calendar(const Value& value, const Context& context);

// Needs the book's instruments and cash.in_mix.
StrategySettings read_strategy(MapReader strategy, const BookSettings& book, const Context& context);

// One an instrument of the book.
std::vector<LineCosts> read_costs(MapReader costs, const BookSettings& book, const Context& context);

// The lines that the strategy weighs: the instruments, and CASH where cash is in the mix.
std::vector<std::string> mix_lines(const BookSettings& book);

}  // namespace nightweigh::settings

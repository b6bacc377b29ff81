#include <algorithm>

#include "daemon/settings/sections.h"

namespace nightweigh::settings {

namespace {

constexpr std::size_t instruments_max = 20'000;

// Empty, or so many capital letters and digits.
std::string read_code(const std::optional<Value>& value, std::size_t length, Problems& problems) {
  if (!value) return {};
  const std::string remedy = "write " + std::to_string(length) + " capital letters and digits, or \"\"";
  const auto text = read_text(*value, problems, remedy);
  if (!text || text->empty()) return {};
  const bool fits = text->size() == length && std::all_of(text->begin(), text->end(), [](char c) {
                      return (c >= 'A' && c <= 'Z') || (c >= '0' && c <= '9');
                    });
  if (!fits) refuse(problems, *value, "has not the form of such a code", remedy);
  return *text;
}

Instrument read_instrument(MapReader& map, const std::string& id, Problems& problems) {
  Instrument instrument;
  instrument.id = id;
  instrument.currency = "EUR";
  if (const auto value = map.optional("currency")) {
    const std::string remedy = "write three capital letters, like EUR";
    const auto text = read_text(*value, problems, remedy);
    if (text && !is_currency_code(*text)) refuse(problems, *value, "is not a currency code", remedy);
    if (text) instrument.currency = *text;
  }
  instrument.lot_size = Decimal(1);
  if (const auto value = map.optional("lot_size")) {
    const auto lot = read_whole(*value, 0, 1'000'000'000, problems);
    if (lot) instrument.lot_size = Decimal(*lot);
  }
  instrument.isin = read_code(map.optional("isin"), 12, problems);
  instrument.mic = read_code(map.optional("mic"), 4, problems);
  return instrument;
}

}  // namespace

std::vector<Instrument> read_instruments(const Value& list, InstrumentTable& table, const Context& context) {
  Problems& problems = context.problems;
  std::vector<Instrument> out;
  if (!is_filled_list(list, problems,
                      "write one entry an instrument, like {id: ALDER, currency: EUR, lot_size: 1}")) {
    return out;
  }
  if (list.node->items.size() > instruments_max) {
    problems.add(list.node->at, list.path, "has too many entries", std::to_string(list.node->items.size()),
                 "at most " + std::to_string(instruments_max) + " instruments are taken");
    return out;
  }
  for (std::size_t i = 0; i < list.node->items.size(); ++i) {
    const std::size_t before = problems.count();
    MapReader map(list.item(i), problems, "write it like {id: ALDER, currency: EUR, lot_size: 1}");
    const std::string form =
        "write 1 to 32 of A-Z 0-9 . _ -, beginning with a letter or digit; CASH is taken";
    const auto value = map.required("id", form);
    const auto id = value ? read_text(*value, problems, form) : std::nullopt;
    if (id && !is_instrument_id(*id)) refuse(problems, *value, "is not an instrument's id", form);
    if (id && table.contains(*id)) {
      refuse(problems, *value, "is defined twice",
             "keep one of the entries, or give the other an id of its own");
    }
    const Instrument instrument = read_instrument(map, id.value_or(""), problems);
    map.finish();
    if (id) table.try_emplace(*id, problems.count() == before ? std::optional(instrument) : std::nullopt);
    out.push_back(instrument);
  }
  return out;
}

}  // namespace nightweigh::settings

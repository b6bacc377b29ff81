#include <algorithm>
#include <set>

#include "daemon/platform/clock.h"
#include "daemon/settings/sections.h"

namespace nightweigh::settings {

namespace {

constexpr std::size_t books_max = 500;
constexpr std::size_t instruments_a_book_max = 1000;

bool is_book_name(const std::string& text) {
  return !text.empty() && text.size() <= 32 && text.front() != '-' &&
         std::all_of(text.begin(), text.end(),
                     [](char c) { return (c >= 'a' && c <= 'z') || (c >= '0' && c <= '9') || c == '-'; });
}

void read_name(MapReader& map, BookSettings& book, std::set<std::string>& names, Problems& problems) {
  const std::string form = "write 1 to 32 of a-z 0-9 -, not beginning with -";
  const auto value = map.required("name", form);
  const auto text = value ? read_text(*value, problems, form) : std::nullopt;
  if (!text) return;
  book.name = *text;
  if (!is_book_name(*text)) {
    refuse(problems, *value, "is not a book's name", form);
  } else if (!names.insert(*text).second) {
    refuse(problems, *value, "names two books", "give each book a name of its own");
  }
}

void read_currency_and_zone(MapReader& map, BookSettings& book, Problems& problems) {
  book.currency = "EUR";
  if (const auto value = map.optional("currency")) {
    const std::string form = "write three capital letters, like EUR";
    const auto text = read_text(*value, problems, form);
    if (text && !is_currency_code(*text)) refuse(problems, *value, "is not a currency code", form);
    book.currency = text && is_currency_code(*text) ? *text : "";
  }
  if (const auto value = map.optional("time_zone")) {
    const std::string form = "write a name of the IANA time zone database, like UTC or Europe/Berlin";
    const auto text = read_text(*value, problems, form);
    if (text && !platform::is_time_zone(*text)) {
      refuse(problems, *value, "is no time zone that this machine knows", form);
    }
    if (text) book.time_zone = *text;
  }
}

void read_book_instruments(MapReader& map, BookSettings& book, const InstrumentTable& table,
                           Problems& problems) {
  const std::string form = "write the ids of the book's instruments, like [ALDER, BRINE]";
  const auto list = map.required("instruments", form);
  if (!list || !is_filled_list(*list, problems, form)) return;
  if (list->node->items.size() > instruments_a_book_max) {
    problems.add(list->node->at, list->path, "has too many entries", std::to_string(list->node->items.size()),
                 "a book holds at most " + std::to_string(instruments_a_book_max) + " instruments");
    return;
  }
  std::set<std::string> seen;
  for (std::size_t i = 0; i < list->node->items.size(); ++i) {
    const Value value = list->item(i);
    const auto id = read_text(value, problems, "write an instrument's id");
    if (!id) continue;
    if (!seen.insert(*id).second) {
      refuse(problems, value, "is listed twice", "list each instrument once");
      continue;
    }
    const auto found = table.find(*id);
    // Something has been refused already: a stand-in keeps the rest of the book readable.
    Instrument instrument;
    instrument.id = *id;
    if (found == table.end()) {
      refuse(problems, value, "is not defined under instruments", "define it there, or remove it here");
    } else if (found->second) {
      instrument = *found->second;
      if (!book.currency.empty() && instrument.currency != book.currency) {
        refuse(problems, value,
               "is in " + instrument.currency + " and the book in " + book.currency +
                   ", while this version takes only instruments in the book's currency",
               "remove it here", ErrorKind::not_built);
      }
    }
    book.instruments.push_back(instrument);
  }
}

void read_start_cash(const Value& cash, BookSettings& book, Problems& problems) {
  const MapReader map(cash, problems, "write an amount by currency, like {EUR: \"1000000.00\"}");
  if (!map.is_map()) return;
  for (const Entry& entry : cash.node->entries) {
    const std::string path = joined(cash.path, entry.key);
    if (!book.currency.empty() && entry.key != book.currency) {
      problems.add(entry.at, path, "is not the book's currency", entry.key,
                   "write the cash in " + book.currency);
      continue;
    }
    const Decimal most(999'999'999'999'999);
    book.start.cash =
        read_decimal({&entry.value, path}, Decimal(), most, "from 0 to 999999999999999", problems)
            .value_or(Decimal());
    if (const int units = minor_units(entry.key); book.start.cash.scale() > units) {
      problems.add(entry.at, path, "is finer than the currency is paid in", book.start.cash.to_string(),
                   "write at most " + std::to_string(units) + " digits after the point");
    }
  }
}

void read_start_holdings(const Value& holdings, BookSettings& book, Problems& problems) {
  const MapReader map(holdings, problems, "write {} or quantities by instrument, like {ALDER: \"1200\"}");
  if (!map.is_map()) return;
  for (const Entry& entry : holdings.node->entries) {
    const std::string path = joined(holdings.path, entry.key);
    const auto instrument = std::find_if(book.instruments.begin(), book.instruments.end(),
                                         [&](const Instrument& one) { return one.id == entry.key; });
    if (instrument == book.instruments.end()) {
      if (book.instruments.empty()) continue;  // the list of instruments itself has been refused
      problems.add(entry.at, path, "is no instrument of the book", entry.key,
                   "name only instruments of the book");
      continue;
    }
    const Decimal most(999'999'999'999'999);
    const Value value{&entry.value, path};
    const auto quantity = read_decimal(value, Decimal(), most, "from 0 to 999999999999999", problems);
    if (!quantity || quantity->is_zero()) continue;
    if (quantity->floor_to_multiple(instrument->smallest_quantity()) != *quantity) {
      refuse(problems, value,
             instrument->is_fractional() ? "has more than 8 digits after the point"
                                         : "is not a whole number of shares",
             instrument->is_fractional() ? "write at most 8"
                                         : "write whole shares; lot_size: 0 takes fractions");
    }
    book.start.holdings[entry.key] = *quantity;
  }
}

void read_start(MapReader start, BookSettings& book, Problems& problems) {
  const std::size_t before = problems.count();
  const auto date = start.required("date", "write the date of the book's first night, like 2025-01-02");
  if (date) book.start.date = read_date(*date, problems).value_or(Date());
  if (const auto cash = start.optional("cash")) read_start_cash(*cash, book, problems);
  if (const auto holdings = start.optional("holdings")) read_start_holdings(*holdings, book, problems);
  start.finish();
  if (start.is_map() && !book.instruments.empty() && problems.count() == before &&
      book.start.cash.is_zero() && book.start.holdings.empty()) {
    problems.add(start.value().node->at, start.value().path, "is worth nothing", "",
                 "give the book cash or holdings");
  }
}

void read_cash(MapReader cash, BookSettings& book, Problems& problems) {
  if (const auto value = cash.optional("in_mix")) {
    book.cash.in_mix = read_boolean(*value, problems).value_or(false);
  }
  if (const auto value = cash.optional("reserve")) {
    const auto reserve = read_number(*value, {0, 1, false, true, "from 0 to below 1"}, problems);
    book.cash.reserve = reserve.value_or(0);
    if (book.cash.in_mix && book.cash.reserve > 0) {
      refuse(problems, *value, "has no meaning with in_mix: true", "write 0, or set in_mix: false");
    }
  }
  if (const auto value = cash.optional("yearly_rate")) {
    const Decimal above_minus_one = Decimal(-1) + Decimal::scaled(1, 10);
    book.cash.yearly_rate = read_decimal(*value, above_minus_one, Decimal(10),
                                         "above -1 and at most 10, like 0.02 for 2 %", problems)
                                .value_or(Decimal());
  }
  cash.finish();
}

void read_gate(MapReader gate, BookSettings& book, Problems& problems) {
  GateSettings& out = book.gate;
  if (const auto value = gate.optional("extra_gain")) {
    out.extra_gain =
        read_number(*value, {0, 1e6, false, false, "from 0 to 1000000"}, problems).value_or(out.extra_gain);
  }
  if (const auto value = gate.optional("payback_days_max")) {
    if (value->is_null()) {
      out.payback_days_max.reset();
    } else {
      out.payback_days_max = read_number(
          *value, {0, 1e6, true, false, "of days above 0 and at most 1000000, or null for no limit"},
          problems);
    }
  }
  if (const auto value = gate.optional("half_life_days")) {
    out.half_life_days = read_number(*value, {1, 1e6, false, false, "of days from 1 to 1000000"}, problems)
                             .value_or(out.half_life_days);
  }
  if (const auto value = gate.optional("always")) out.always = read_boolean(*value, problems).value_or(false);
  gate.accept_only("horizon_days", OffValue::word("auto"));
  gate.accept_only("full_moves", OffValue::no());
  gate.accept_only("nuisance_fee", OffValue::of(0));
  gate.finish();
}

void read_parts_to_come(MapReader& map) {
  map.accept_only("calendars", OffValue::no_entries());
  MapReader limits = map.part("limits");
  limits.accept_only("max_weight", OffValue::of(1));
  limits.accept_only("min_weight", OffValue::of(0));
  limits.accept_only("max_turnover", OffValue::of(1));
  limits.accept_only("max_order_value", OffValue::word(""));
  limits.accept_only("max_adv_share", OffValue::of(1));
  limits.accept_only("max_drawdown", OffValue::of(1));
  limits.finish();
  MapReader checks = map.part("checks");
  checks.accept_only("missing", OffValue::word("wait"));
  for (const char* key :
       {"outlier_abs", "outlier_sd", "outlier_floor", "stale_days", "last_close_days_max", "cut_off"}) {
    checks.accept_only(key, OffValue::nothing());
  }
  checks.finish();
  MapReader review = map.part("review");
  review.accept_only("approvals", OffValue::of(0));
  review.accept_only("deadline", OffValue::nothing());
  review.finish();
}

void read_execution(MapReader& map, BookSettings& book, Problems& problems) {
  const auto value = map.required("execution", "write execution: assumed");
  const auto word = value ? read_word(*value, {"assumed", "reported"}, problems) : std::nullopt;
  if (word == "reported") {
    refuse(problems, *value, "is not in this version, which accepts only assumed", "write assumed",
           ErrorKind::not_built);
  }
  if (const auto lag = map.optional("execution_lag_nights")) {
    book.execution_lag_nights = read_whole(*lag, 0, 1, problems).value_or(1);
  }
}

BookSettings read_book(MapReader map, const InstrumentTable& table, std::set<std::string>& names,
                       const Context& context) {
  Problems& problems = context.problems;
  BookSettings book;
  read_name(map, book, names, problems);
  read_currency_and_zone(map, book, problems);
  read_book_instruments(map, book, table, problems);
  if (const auto value = map.optional("calendar")) book.calendar = read_calendar(*value, context);
  read_cash(map.part("cash"), book, problems);
  read_gate(map.part("gate"), book, problems);
  const auto start = map.required("start", "write start: {date: 2025-01-02, cash: {EUR: \"1000000.00\"}}");
  const auto strategy = map.required("strategy", "write strategy: {rule: exponentiated_gradient}");
  const auto costs = map.part("costs");
  if (start)
    read_start(MapReader(*start, problems, "write its keys date, cash and holdings"), book, problems);
  if (strategy) {
    book.strategy = read_strategy(MapReader(*strategy, problems, "write its key rule"), book, context);
  }
  book.costs = read_costs(costs, book, context);
  read_parts_to_come(map);
  read_execution(map, book, problems);
  map.finish();
  return book;
}

}  // namespace

std::vector<BookSettings> read_books(const Value& list, const InstrumentTable& table,
                                     const Context& context) {
  std::vector<BookSettings> books;
  if (!is_filled_list(list, context.problems, "write one entry a book")) return books;
  if (list.node->items.size() > books_max) {
    context.problems.add(list.node->at, list.path, "has too many entries",
                         std::to_string(list.node->items.size()),
                         "at most " + std::to_string(books_max) + " books are taken");
    return books;
  }
  std::set<std::string> names;
  for (std::size_t i = 0; i < list.node->items.size(); ++i) {
    books.push_back(read_book(MapReader(list.item(i), context.problems, "write the book's keys, name first"),
                              table, names, context));
  }
  return books;
}

}  // namespace nightweigh::settings

#include <algorithm>

#include "daemon/settings/sections.h"

namespace nightweigh::settings {

namespace {

// A side may cost at most half of the traded value: beyond that a round trip would leave nothing.
const Decimal& side_bp_limit() {
  static const Decimal limit(5000);
  return limit;
}

// The keys that both the book's costs and a line's costs have; `costs` holds what applies where they are
// silent.
void read_line_costs(MapReader& map, LineCosts& costs, Problems& problems) {
  const std::size_t before = problems.count();
  const Decimal most = side_bp_limit() - Decimal::scaled(1, 10);
  const auto read = [&](const char* key, Decimal& into) {
    if (const auto value = map.optional(key)) {
      into = read_decimal(*value, Decimal(), most, "of basis points from 0 to below 5000", problems)
                 .value_or(into);
    }
  };
  read("commission_bp", costs.commission_bp);
  read("half_spread_bp", costs.half_spread_bp);
  const Decimal sum = costs.commission_bp + costs.half_spread_bp;
  if (problems.count() == before && !(sum < side_bp_limit())) {
    problems.add(map.value().node->at, map.value().path,
                 "has commission and half spread that cost half of a trade or more", sum.to_string() + " bp",
                 "together they must stay below 5000 bp");
  }
  for (const char* key : {"commission_per_share", "ticket_min", "duty_buy_bp", "duty_sell_bp", "fx_bp"}) {
    map.accept_only(key, OffValue::of(0));
  }
  map.accept_only("ticket_max", OffValue::word(""));
}

}  // namespace

std::vector<LineCosts> read_costs(MapReader costs, const BookSettings& book, const Context& context) {
  Problems& problems = context.problems;
  LineCosts common{Decimal(2), Decimal(3)};
  const std::size_t before = problems.count();
  read_line_costs(costs, common, problems);
  if (problems.count() != before) common = LineCosts();  // said once, not again for each line
  MapReader impact = costs.part("impact");
  impact.accept_only("y", OffValue::of(0));
  impact.accept_only("adv", OffValue::no_entries());
  impact.finish();

  std::vector<LineCosts> out(book.instruments.size(), common);
  if (const auto lines = costs.optional("lines")) {
    const MapReader map(*lines, problems,
                        "write {} or costs by instrument, like {ALDER: {half_spread_bp: 5}}");
    std::map<std::string, std::size_t> place;
    for (std::size_t i = 0; i < book.instruments.size(); ++i) place[book.instruments[i].id] = i;
    for (const Entry& entry : lines->node->entries) {
      const std::string path = joined(lines->path, entry.key);
      const auto found = place.find(entry.key);
      if (found == place.end()) {
        if (place.empty()) continue;  // the list of instruments itself has been refused
        problems.add(entry.at, path, "is no instrument of the book", entry.key,
                     "name only instruments of the book");
        continue;
      }
      MapReader line({&entry.value, path}, problems, "write costs like {half_spread_bp: 5}");
      read_line_costs(line, out[found->second], problems);
      line.finish();
    }
  }
  costs.finish();
  return out;
}

}  // namespace nightweigh::settings

#include "daemon/runner/night_answers.h"

#include <algorithm>
#include <nlohmann/json.hpp>
#include <utility>

namespace nightweigh::runner {

using nlohmann::json;
using nlohmann::ordered_json;

namespace {

// A sheet is approved at once (no approvals are asked for) and closed when it has been filled: at its own
// close, or at the next night's.
json sheet_state(const json& night, const BookView& view) {
  if (night.at("sheet").is_null()) return {};
  const json& tonight = night.at("filled_sheets");
  const bool filled = std::find(tonight.begin(), tonight.end(), night.at("date")) != tonight.end() ||
                      (view.last_night && view.last_night->to_string() > night.at("date").get<std::string>());
  return filled ? "closed" : "approved";
}

Result<json> parsed(const store::StoredNight& night, const BookView& view) {
  json record = json::parse(night.bytes, nullptr, false);
  if (record.is_discarded()) {
    return failure({ErrorKind::corrupted, "book " + view.settings->name + ", night " + night.date.to_string(),
                    "is not readable", "", "restore the database from a backup"});
  }
  return record;
}

}  // namespace

Result<std::string> night_json(const store::StoredNight& night, const BookView& view) {
  Result<json> record = parsed(night, view);
  if (!record) return failure(record.error());
  const json state = sheet_state(*record, view);
  if (!state.is_null()) (*record)["sheet"]["state"] = state;
  (*record)["hash"] = night.hash;
  (*record)["sequence"] = night.sequence;
  (*record)["batches"] = night.batches;
  return record->dump();
}

Result<LogPage> log_page(store::Store& store, const store::LogFilter& filter, const BookView& view) {
  store::LogFilter one_more = filter;
  ++one_more.limit;  // tells whether there is a next page
  Result<std::vector<store::StoredNight>> nights = store.log(view.settings->name, one_more);
  if (!nights) return failure(nights.error());
  const bool more = nights->size() > filter.limit;
  if (more) nights->pop_back();

  ordered_json rows = ordered_json::array();
  for (const store::StoredNight& night : *nights) {
    Result<json> record = parsed(night, view);
    if (!record) return failure(record.error());
    ordered_json row;
    for (const char* key : {"date", "verdict", "reason", "growth_saved_bp_year", "cost_bp", "payback_days",
                            "horizon_days", "turnover", "lines"}) {
      row[key] = record->at(key);
    }
    row["sheet"] = sheet_state(*record, view);
    row["reviewed_by"] = ordered_json::array();
    row["batch"] = night.batches.empty() ? ordered_json() : ordered_json(night.batches.back());
    row["batches"] = night.batches;
    row["hash"] = night.hash;
    rows.push_back(std::move(row));
  }
  LogPage page;
  if (more) page.next = nights->back().date.to_string();
  ordered_json body;
  body["book"] = view.settings->name;
  body["rows"] = std::move(rows);
  body["next"] = page.next ? ordered_json(*page.next) : ordered_json();
  page.body = body.dump();
  return page;
}

}  // namespace nightweigh::runner

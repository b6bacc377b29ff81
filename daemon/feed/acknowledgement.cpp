#include "daemon/feed/acknowledgement.h"

#include <nlohmann/json.hpp>
#include <utility>

namespace nightweigh::feed {

const char* name_of(Acknowledgement::Status status) {
  switch (status) {
    case Acknowledgement::Status::taken:
      return "taken";
    case Acknowledgement::Status::known:
      return "known";
    case Acknowledgement::Status::refused:
      return "refused";
  }
  return "refused";
}

std::string Acknowledgement::to_json() const {
  using Json = nlohmann::ordered_json;
  Json out{{"status", name_of(status)}, {"digest", digest}, {"rows", rows}};
  Json& books_out = out["books"] = Json::array();
  for (const BookAnswer& answer : books) {
    Json dates = Json::array();
    for (const Date date : answer.dates) dates.push_back(date.to_string());
    books_out.push_back({{"book", answer.book},
                         {"result", answer.waiting ? "waiting" : "night"},
                         {"dates", std::move(dates)},
                         {"reasons", answer.reasons}});
  }
  Json& errors_out = out["errors"] = Json::array();
  for (const RowError& error : errors) {
    errors_out.push_back({{"row", error.row},
                          {"column", error.column},
                          {"value", error.value},
                          {"problem", error.problem},
                          {"remedy", error.remedy},
                          {"kind", nightweigh::name_of(error.kind)}});
  }
  // `replace`: a text that is no UTF-8 must not keep the answer from being given.
  return out.dump(-1, ' ', false, Json::error_handler_t::replace);
}

Acknowledgement refusal(std::string digest, std::vector<RowError> errors) {
  Acknowledgement answer;
  answer.digest = std::move(digest);
  answer.errors = std::move(errors);
  return answer;
}

}  // namespace nightweigh::feed

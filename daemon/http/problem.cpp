// RFC 9457, Problem Details for HTTP APIs.
#include <boost/beast/http/status.hpp>
#include <nlohmann/json.hpp>

#include "daemon/http/server.h"

namespace nightweigh::http {

namespace {

std::string reason_of(int status) {
  const auto known = boost::beast::http::int_to_status(static_cast<unsigned>(status));
  const auto text = boost::beast::http::obsolete_reason(known);
  return std::string(text.data(), text.size());
}

Response as_response(int status, const nlohmann::ordered_json& members) {
  Response response;
  response.status = status;
  response.content_type = "application/problem+json";
  // `replace`: a problem document is also written about text that is no UTF-8.
  response.body = members.dump(2, ' ', false, nlohmann::ordered_json::error_handler_t::replace) + "\n";
  return response;
}

nlohmann::ordered_json basic_members(int status, const std::string& title, const std::string& detail) {
  return {{"type", "about:blank"},
          {"title", title.empty() ? reason_of(status) : title},
          {"status", status},
          {"detail", detail}};
}

}  // namespace

Response problem(int status, const std::string& title, const std::string& detail) {
  return as_response(status, basic_members(status, title, detail));
}

Response problem(int status, const Error& error) {
  nlohmann::ordered_json members = basic_members(status, "", error.message());
  members["kind"] = name_of(error.kind);
  if (!error.place.empty()) members["place"] = error.place;
  if (!error.problem.empty()) members["problem"] = error.problem;
  if (!error.value.empty()) members["value"] = error.value;
  if (!error.remedy.empty()) members["remedy"] = error.remedy;
  return as_response(status, members);
}

}  // namespace nightweigh::http

#include "daemon/http/entity_tag.h"

#include <array>
#include <cstdint>
#include <cstdio>

namespace nightweigh::http {

namespace {

// Fowler, Noll and Vo, 64 bit, variant 1a; constants from the authors' page, quoted in RFC 9923.
std::string content_tag(std::string_view body) {
  std::uint64_t hash = 0xcbf29ce484222325u;
  for (const char c : body) {
    hash ^= static_cast<unsigned char>(c);
    hash *= 0x00000100000001b3u;
  }
  std::array<char, 40> text{};
  std::snprintf(text.data(), text.size(), "%016llx-%zx", static_cast<unsigned long long>(hash), body.size());
  return text.data();
}

// Weak comparison (RFC 9110, 8.8.3.2) of one tag with a list like: "a", W/"b"
bool list_has(std::string_view list, std::string_view quoted_tag) {
  std::size_t at = 0;
  while ((at = list.find('"', at)) != std::string_view::npos) {
    const std::size_t end = list.find('"', at + 1);
    if (end == std::string_view::npos) return false;
    if (list.substr(at, end - at + 1) == quoted_tag) return true;
    at = end + 1;
  }
  return false;
}

}  // namespace

Response with_entity_tag(const Request& request, Response response, std::string_view digest) {
  if (response.status != 200) return response;
  std::string tag = "\"";
  tag += digest.empty() ? content_tag(response.body) : std::string(digest);
  tag += '"';
  response.headers["ETag"] = tag;
  response.headers.emplace("Cache-Control", "no-cache");
  const auto asked = request.headers.find("if-none-match");
  if (request.method == "GET" && asked != request.headers.end() &&
      (asked->second == "*" || list_has(asked->second, tag))) {
    response.status = 304;
    response.body.clear();
  }
  return response;
}

}  // namespace nightweigh::http

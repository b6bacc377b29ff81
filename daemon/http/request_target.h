// The request target of HTTP, strictly read: path segments and query, percent-decoded.
#pragma once

#include <map>
#include <string>
#include <string_view>
#include <vector>

#include "daemon/domain/result.h"

namespace nightweigh::http {

struct RequestTarget {
  std::string authority;                     // of an absolute target ("http://host:port/path"), else empty
  std::string path;                          // decoded
  std::vector<std::string> segments;         // decoded
  std::map<std::string, std::string> query;  // decoded; '+' is a space, a key without '=' has the value ""
};

// Origin form or absolute form (RFC 9112, 3.2). Refused, so that no two readers can understand the same
// target differently: a bad or unfinished escape, an escaped control byte or slash, bytes that are no
// UTF-8, "." and ".." segments however they are written, empty segments but for one closing slash, a
// fragment, a repeated or empty query key.
Result<RequestTarget> parse_request_target(std::string_view target);

// Text as one path segment or query value: everything but RFC 3986's unreserved characters is escaped.
std::string percent_encoded(std::string_view text);

}  // namespace nightweigh::http

// Entity tags and If-None-Match (RFC 9110, 8.8.3 and 13.1.2): a client that has the current answer already
// is told so instead of getting it again.
#pragma once

#include <string>
#include <string_view>

#include "daemon/http/server.h"

namespace nightweigh::http {

// Adds the strong tag "<digest>" to an answer of status 200 and, where the request is a GET whose
// If-None-Match names it (or is *), makes it a 304 without body. digest: something that changes whenever
// the body does, for example the first half of a SHA-256; hexadecimal or other visible characters but the
// quote. Empty: a 64-bit FNV-1a hash of the body and its length. Cache-Control becomes no-cache (keep, but
// ask), unless the answer has one.
Response with_entity_tag(const Request& request, Response response, std::string_view digest = {});

}  // namespace nightweigh::http

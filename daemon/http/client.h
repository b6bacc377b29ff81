// A blocking HTTP client for the command line: one request, one answer, with time-outs.
#pragma once

#include <chrono>
#include <string>

#include "daemon/domain/result.h"

namespace nightweigh::http {

struct Answer {
  int status = 0;
  std::string content_type;
  std::string body;
};

// endpoint: "127.0.0.1:8420", "[::1]:8420" or "unix:/path". target: "/v1/books/harbour/log?limit=10".
// A service that does not answer is ErrorKind::not_found with the remedy to start it.
Result<Answer> get(const std::string& endpoint, const std::string& target,
                   std::chrono::seconds time_out = std::chrono::seconds(30));

}  // namespace nightweigh::http

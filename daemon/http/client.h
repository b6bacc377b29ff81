// A blocking HTTP client for the command line: one request, one answer, with a time-out.
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

// endpoint: "127.0.0.1:8420", "[::1]:8420", "localhost:8420" (that is 127.0.0.1) or "unix:/path".
// target: "/v1/books/harbour/log?limit=10", with names put through percent_encoded() (request_target.h).
//
// Errors: a service that is not there is ErrorKind::not_found with the remedy to start it; one that does not
// answer whole within time_out, or drops the connection, is busy; an answer of more than 256 MiB is limit;
// one that is no HTTP is corrupted; a socket that this user may not open is storage; a wrong endpoint is
// bad_settings, a wrong target bad_input. Statuses of refusal (404, 503, ...) are no errors but answers.
Result<Answer> get(const std::string& endpoint, const std::string& target,
                   std::chrono::seconds time_out = std::chrono::seconds(30));

}  // namespace nightweigh::http

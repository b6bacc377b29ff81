// The other end of the feed socket: sends one line, waits for its acknowledgement.
#pragma once

#include <chrono>
#include <string>
#include <string_view>

#include "daemon/domain/result.h"

namespace nightweigh::feed {

struct ClientLimits {
  std::chrono::milliseconds connect = std::chrono::seconds(5);
  // From the connection to the whole answer: a batch may make many nights possible.
  std::chrono::milliseconds answer = std::chrono::seconds(300);
  std::size_t answer_bytes_max = 64u << 20;
};

// Sends `line` (without a newline) to endpoint "127.0.0.1:8421", "[::1]:8421" or "unix:/path" and returns
// the acknowledgement line without its newline. Blocks. Errors: bad_input (an endpoint or a line of the
// wrong form), not_found (nobody listens there), busy (no answer in time), storage (the connection broke
// before the answer; whether the batch was taken is then unknown, and sending it again is safe).
Result<std::string> send_line(const std::string& endpoint, std::string_view line,
                              const ClientLimits& limits = {});

}  // namespace nightweigh::feed

// The feed socket: newline-delimited JSON over TCP on loopback or a Unix-domain socket. One batch a line,
// one line of acknowledgement for each, in order. An empty line is ignored, a "\r" before the newline is
// dropped. A line that the connection's end cuts off is not delivered.
#pragma once

#include <utility>  // before the Asio headers, which need it for coroutines and do not include it

#include <boost/asio/io_context.hpp>
#include <chrono>
#include <cstdint>
#include <filesystem>
#include <memory>
#include <string>

#include "daemon/domain/result.h"
#include "daemon/feed/batch.h"
#include "daemon/feed/deliver.h"

namespace nightweigh::feed {

struct SocketSettings {
  std::string address;               // tcp address, or empty for a Unix-domain socket
  std::uint16_t port = 0;            // 0 = any free port
  std::filesystem::path path;        // Unix-domain socket; its file gets mode 0600
  std::size_t connections_max = 64;  // a further one is answered by a refusal line and closed
  std::chrono::milliseconds idle_limit = std::chrono::seconds(300);  // without a byte for so long: closed
  std::chrono::milliseconds write_limit =
      std::chrono::seconds(30);  // an answer not taken for so long: closed
  Limits limits;
};

// Everything runs on the io_context's thread; stop() and stopped() may be called from any thread. The
// io_context must outlive the server.
class SocketServer {
 public:
  // Binds and listens; an address in use is an Error that names it (busy), an address that is not loopback
  // is refused: this version asks feeders for no token. A stale Unix-domain socket file that nobody
  // listens on is replaced; one that somebody listens on is ErrorKind::busy.
  static Result<std::unique_ptr<SocketServer>> open(boost::asio::io_context& io, SocketSettings settings,
                                                    Deliver deliver, Report report = {});
  virtual ~SocketServer() = default;
  virtual void start() = 0;
  // Accepts no more; connections end after the batch in hand has been answered.
  virtual void stop() = 0;
  virtual bool stopped() const = 0;          // true once stopped and no connection is left
  virtual std::string endpoint() const = 0;  // "127.0.0.1:40123", "[::1]:40123" or "unix:/path"
};

}  // namespace nightweigh::feed

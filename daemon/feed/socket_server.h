// The feed socket: newline-delimited JSON over TCP on loopback or a Unix-domain socket. One batch a line,
// one line of acknowledgement for each, in order.
#pragma once

#include <boost/asio/io_context.hpp>
#include <filesystem>
#include <memory>
#include <string>

#include "daemon/domain/result.h"
#include "daemon/feed/batch.h"
#include "daemon/feed/drop_folder.h"

namespace nightweigh::feed {

struct SocketSettings {
  std::string address;         // tcp address, or empty for a Unix-domain socket
  std::uint16_t port = 0;      // 0 = any free port
  std::filesystem::path path;  // Unix-domain socket
  std::size_t connections_max = 64;
  std::chrono::seconds idle_s{300};   // a connection without a byte for so long is closed
  std::chrono::seconds write_s{30};
  Limits limits;
};

class SocketServer {
 public:
  // Binds and listens; an address in use is an Error that names it. A stale Unix-domain socket file that
  // nobody listens on is replaced; one that somebody listens on is ErrorKind::busy.
  static Result<std::unique_ptr<SocketServer>> open(boost::asio::io_context& io, SocketSettings settings,
                                                    Deliver deliver);
  virtual ~SocketServer() = default;
  virtual void start() = 0;
  // Accepts no more; connections end after the batch in hand has been answered.
  virtual void stop() = 0;
  virtual bool stopped() const = 0;  // true once stopped and no connection is left
  virtual std::string endpoint() const = 0;  // "127.0.0.1:40123" or "unix:/path"
};

}  // namespace nightweigh::feed

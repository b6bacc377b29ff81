// HTTP/1.1 on loopback or a Unix-domain socket: connections, limits, time-outs, the Host list, problem
// documents. What the answers say is somebody else's: a Handler. The only folder that includes Beast.
#pragma once

#include <utility>  // Asio's coroutine headers of this Boost need it first

#include <boost/asio/awaitable.hpp>
#include <boost/asio/io_context.hpp>
#include <chrono>
#include <cstddef>
#include <cstdint>
#include <filesystem>
#include <functional>
#include <map>
#include <memory>
#include <string>
#include <vector>

#include "daemon/domain/result.h"

namespace nightweigh::http {

struct Request {
  std::string method;  // "GET", "POST", ...; a HEAD request arrives as "GET"
  std::string path;    // percent-decoded, without the query: "/v1/books/harbour/target"
  std::vector<std::string>
      segments;  // {"v1","books","harbour","target"}; a closing '/' leaves an empty last one
  std::map<std::string, std::string>
      query;  // percent-decoded; a repeated key is answered 400 before the handler
  std::map<std::string, std::string>
      headers;  // names in lower case; repetitions joined by ", " (RFC 9110, 5.3)
  std::string body;
};

struct Response {
  int status = 200;  // 200 to 599
  std::string content_type = "application/json";
  // Beside these the server sets Content-Type, Content-Length, Connection, Date, Server,
  // X-Content-Type-Options and, unless it is here, Cache-Control: no-store.
  std::map<std::string, std::string> headers;
  std::string body;
};

// RFC 9457 problem document: type "about:blank", title, status, detail. An empty title becomes the
// status's reason phrase.
Response problem(int status, const std::string& title, const std::string& detail);
// The same from an Error: detail is its message; its members stand beside it as kind, place, problem,
// value and remedy, the empty ones left out.
Response problem(int status, const Error& error);

using Handler = std::function<boost::asio::awaitable<Response>(const Request&)>;

struct ServerSettings {
  std::string address;         // loopback address ("127.0.0.1", "::1"), or empty for a Unix-domain socket
  std::uint16_t port = 0;      // 0 = any free port
  std::filesystem::path path;  // Unix-domain socket
  std::size_t connections_max = 128;         // one more is answered 503 and closed
  std::size_t header_bytes_max = 16u << 10;  // request line and headers; beyond: 431
  std::size_t body_bytes_max = 1u << 20;     // beyond: 413
  std::chrono::seconds read_s{
      15};  // for a request to arrive whole once begun, and for the first one to begin
  std::chrono::seconds idle_s{60};   // between two requests of a connection
  std::chrono::seconds write_s{30};  // for each 256 KiB of an answer to be taken
  std::chrono::seconds stop_s{5};    // after stop(), connections whose peer does not take its answer are cut
  // Told, in one line of text, what a person should know: a handler's exception, a refusal by the system
  // to accept. May be empty.
  std::function<void(const std::string&)> report;
};

// One thread runs the io_context, and the io_context outlives the server; a coroutine of a Handler may wait
// for other threads, but its connection's next step is on that one. Answers of one connection keep
// the order of its requests: the next request is read when the answer before it is written.
class Server {
 public:
  // Binds and listens. An address that is no loopback address is refused; an address in use is an Error
  // that names it. A stale Unix-domain socket file that nobody listens on is replaced; one that somebody
  // listens on is ErrorKind::busy; a file that is no socket is left alone and refused.
  static Result<std::unique_ptr<Server>> open(boost::asio::io_context& io, ServerSettings settings,
                                              Handler handler);
  virtual ~Server() = default;
  virtual void start() = 0;  // before the io_context runs, or on its thread
  // May be called from any thread. Accepts no more, closes connections that have no whole request in hand,
  // finishes the answers in hand and closes theirs.
  virtual void stop() = 0;
  virtual bool stopped() const = 0;          // stop() was called and no connection is left
  virtual std::string endpoint() const = 0;  // "127.0.0.1:8420", "[::1]:8420" or "unix:/path"
};

}  // namespace nightweigh::http

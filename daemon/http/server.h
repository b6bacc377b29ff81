// HTTP/1.1 on loopback or a Unix-domain socket: connections, limits, time-outs, the Host list, problem
// documents. What the answers say is somebody else's: a Handler. The only folder that includes Beast.
#pragma once

#include <boost/asio/awaitable.hpp>
#include <boost/asio/io_context.hpp>
#include <chrono>
#include <filesystem>
#include <functional>
#include <map>
#include <memory>
#include <string>
#include <vector>

#include "daemon/domain/result.h"

namespace nightweigh::http {

struct Request {
  std::string method;                        // "GET", "HEAD", ...
  std::string path;                          // percent-decoded, without the query: "/v1/books/harbour/target"
  std::vector<std::string> segments;         // {"v1","books","harbour","target"}
  std::map<std::string, std::string> query;  // percent-decoded; a repeated key is answered 400 before the handler
  std::map<std::string, std::string> headers;  // names in lower case
  std::string body;
};

struct Response {
  int status = 200;
  std::string content_type = "application/json";
  std::map<std::string, std::string> headers;
  std::string body;
};

// RFC 9457 problem document: type "about:blank", title, status, detail and, where given, more members.
Response problem(int status, const std::string& title, const std::string& detail);
Response problem(int status, const Error& error);

using Handler = std::function<boost::asio::awaitable<Response>(const Request&)>;

struct ServerSettings {
  std::string address;         // tcp loopback address, or empty for a Unix-domain socket
  std::uint16_t port = 0;
  std::filesystem::path path;  // Unix-domain socket
  std::size_t connections_max = 128;
  std::size_t header_bytes_max = 16u << 10;
  std::size_t body_bytes_max = 1u << 20;
  std::chrono::seconds read_s{15};   // for a request to arrive whole, once begun, and between requests 60
  std::chrono::seconds write_s{30};
};

class Server {
 public:
  static Result<std::unique_ptr<Server>> open(boost::asio::io_context& io, ServerSettings settings, Handler handler);
  virtual ~Server() = default;
  virtual void start() = 0;
  virtual void stop() = 0;           // accepts no more; closes idle connections, finishes answers in hand
  virtual bool stopped() const = 0;
  virtual std::string endpoint() const = 0;  // "127.0.0.1:8420" or "unix:/path"
};

}  // namespace nightweigh::http

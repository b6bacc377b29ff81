// A server on a free port with a sample handler, its io_context in a thread, and a raw client that says
// byte for byte what it is told.
#pragma once

#include <filesystem>
#include <memory>
#include <optional>
#include <string>
#include <thread>
#include <vector>

#include "daemon/http/server.h"

namespace nightweigh::http {

// GET /hello -> {"hello":"world"}; GET /echo/{word} -> the word, the query and the headers as seen;
// POST /length -> the body's length; GET /large -> 3 MiB; GET /tagged -> with an entity tag;
// GET /throws, /injects -> bugs; GET /slow -> answers after 300 ms.
Handler sample_handler();

class LiveServer {
 public:
  // Settings of the wire that are empty become 127.0.0.1 and any free port.
  explicit LiveServer(ServerSettings settings = {}, Handler handler = sample_handler());
  LiveServer(const LiveServer&) = delete;
  LiveServer& operator=(const LiveServer&) = delete;
  ~LiveServer();

  std::string endpoint() const { return server_->endpoint(); }
  std::string host() const;  // for the Host header
  std::uint16_t port() const;
  Server& server() { return *server_; }
  std::vector<std::string> reports() const;

 private:
  struct Reports;
  std::shared_ptr<Reports> reports_;
  boost::asio::io_context io_;
  std::unique_ptr<Server> server_;
  std::thread thread_;
};

struct RawAnswer {
  int status = 0;
  std::string head;  // status line and headers, as sent
  std::string body;
  std::string header(const std::string& name) const;  // "" where it is not
};

class RawClient {
 public:
  explicit RawClient(const std::string& endpoint);
  RawClient(const RawClient&) = delete;
  RawClient& operator=(const RawClient&) = delete;
  ~RawClient();

  bool send(const std::string& bytes);  // false: the peer has closed
  // nullopt: closed, or nothing whole within 20 s.
  std::optional<RawAnswer> read_answer(bool without_body = false);
  bool is_closed_by_peer();  // waits for it, up to 20 s

 private:
  bool read_some();
  int socket_ = -1;
  std::string received_;
};

// One request on a connection of its own.
std::optional<RawAnswer> ask(const std::string& endpoint, const std::string& request);

// Waits up to 20 s.
bool becomes_true(const std::function<bool()>& condition);

}  // namespace nightweigh::http

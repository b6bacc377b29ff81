#include "tests/unit/daemon/http/live_server.h"

#include <arpa/inet.h>
#include <doctest/doctest.h>
#include <netinet/in.h>
#include <poll.h>
#include <sys/socket.h>
#include <sys/un.h>
#include <unistd.h>

#include <boost/asio/executor_work_guard.hpp>
#include <boost/asio/steady_timer.hpp>
#include <boost/asio/this_coro.hpp>
#include <boost/asio/use_awaitable.hpp>
#include <cstring>
#include <mutex>
#include <nlohmann/json.hpp>
#include <stdexcept>

#include "daemon/http/entity_tag.h"
#include "daemon/http/router.h"

namespace nightweigh::http {

namespace {

constexpr int patience_ms = 20'000;

Response json_of(const nlohmann::json& value) {
  Response response;
  response.body = value.dump();
  return response;
}

}  // namespace

Handler sample_handler() {
  using boost::asio::awaitable;
  Router router;
  router.get("/hello", [](const Request&, const PathValues&) -> awaitable<Response> {
    co_return json_of({{"hello", "world"}});
  });
  router.get("/echo/{word}", [](const Request& request, const PathValues& values) -> awaitable<Response> {
    co_return json_of({{"word", values.at("word")},
                       {"method", request.method},
                       {"path", request.path},
                       {"query", request.query},
                       {"headers", request.headers}});
  });
  router.add("POST", "/length", [](const Request& request, const PathValues&) -> awaitable<Response> {
    co_return json_of({{"length", request.body.size()}, {"head", request.body.substr(0, 40)}});
  });
  router.get("/large", [](const Request&, const PathValues&) -> awaitable<Response> {
    Response response;
    response.content_type = "text/plain";
    response.body.assign(3u << 20, 'x');
    co_return response;
  });
  router.get("/tagged", [](const Request& request, const PathValues&) -> awaitable<Response> {
    co_return with_entity_tag(request, json_of({{"night", "2026-03-02"}}), "abc123");
  });
  router.get("/throws", [](const Request&, const PathValues&) -> awaitable<Response> {
    throw std::runtime_error("secret of the inside");
    co_return Response{};
  });
  router.get("/injects", [](const Request&, const PathValues&) -> awaitable<Response> {
    Response response;
    response.headers["X-Name"] = "a\r\nSet-Cookie: b";
    co_return response;
  });
  router.get("/slow", [](const Request&, const PathValues&) -> awaitable<Response> {
    boost::asio::steady_timer timer(co_await boost::asio::this_coro::executor,
                                    std::chrono::milliseconds(300));
    co_await timer.async_wait(boost::asio::use_awaitable);
    co_return json_of({{"slow", true}});
  });
  return std::move(router).handler();
}

struct LiveServer::Reports {
  mutable std::mutex mutex;
  std::vector<std::string> texts;
};

LiveServer::LiveServer(ServerSettings settings, Handler handler) : reports_(std::make_shared<Reports>()) {
  if (settings.address.empty() && settings.path.empty()) settings.address = "127.0.0.1";
  settings.report = [reports = reports_](const std::string& text) {
    const std::lock_guard lock(reports->mutex);
    reports->texts.push_back(text);
  };
  Result<std::unique_ptr<Server>> server = Server::open(io_, std::move(settings), std::move(handler));
  if (!server) throw std::runtime_error(server.error().message());
  server_ = std::move(*server);
  server_->start();
  thread_ = std::thread([this] { io_.run(); });
}

LiveServer::~LiveServer() {
  server_->stop();
  thread_
      .join();  // the io_context runs out of work once everything has stopped: if it does not, the test hangs
  CHECK(server_->stopped());
}

std::string LiveServer::host() const {
  return endpoint().starts_with("unix:") ? "localhost" : endpoint();
}

std::uint16_t LiveServer::port() const {
  return static_cast<std::uint16_t>(std::stoi(endpoint().substr(endpoint().rfind(':') + 1)));
}

std::vector<std::string> LiveServer::reports() const {
  const std::lock_guard lock(reports_->mutex);
  return reports_->texts;
}

std::string RawAnswer::header(const std::string& name) const {
  const std::size_t at = head.find("\r\n" + name + ": ");
  if (at == std::string::npos) return "";
  const std::size_t from = at + name.size() + 4;
  return head.substr(from, head.find("\r\n", from) - from);
}

RawClient::RawClient(const std::string& endpoint) {
  int connected = -1;
  if (endpoint.starts_with("unix:")) {
    sockaddr_un address{};
    address.sun_family = AF_UNIX;
    std::strncpy(address.sun_path, endpoint.c_str() + 5, sizeof(address.sun_path) - 1);
    socket_ = ::socket(AF_UNIX, SOCK_STREAM | SOCK_CLOEXEC, 0);
    connected = ::connect(socket_, reinterpret_cast<const sockaddr*>(&address), sizeof(address));
  } else {
    const auto port = static_cast<std::uint16_t>(std::stoi(endpoint.substr(endpoint.rfind(':') + 1)));
    if (endpoint.front() == '[') {
      sockaddr_in6 address{};
      address.sin6_family = AF_INET6;
      address.sin6_port = htons(port);
      address.sin6_addr = in6addr_loopback;
      socket_ = ::socket(AF_INET6, SOCK_STREAM | SOCK_CLOEXEC, 0);
      connected = ::connect(socket_, reinterpret_cast<const sockaddr*>(&address), sizeof(address));
    } else {
      sockaddr_in address{};
      address.sin_family = AF_INET;
      address.sin_port = htons(port);
      address.sin_addr.s_addr = htonl(INADDR_LOOPBACK);
      socket_ = ::socket(AF_INET, SOCK_STREAM | SOCK_CLOEXEC, 0);
      connected = ::connect(socket_, reinterpret_cast<const sockaddr*>(&address), sizeof(address));
    }
  }
  REQUIRE(connected == 0);
}

RawClient::~RawClient() {
  ::close(socket_);
}

bool RawClient::send(const std::string& bytes) {
  for (std::size_t at = 0; at < bytes.size();) {
    const ssize_t count = ::send(socket_, bytes.data() + at, bytes.size() - at, MSG_NOSIGNAL);
    if (count <= 0) return false;
    at += static_cast<std::size_t>(count);
  }
  return true;
}

bool RawClient::read_some() {
  pollfd waited{socket_, POLLIN, 0};
  if (::poll(&waited, 1, patience_ms) != 1) return false;
  std::vector<char> bytes(65536);
  const ssize_t count = ::recv(socket_, bytes.data(), bytes.size(), 0);
  if (count <= 0) return false;
  received_.append(bytes.data(), static_cast<std::size_t>(count));
  return true;
}

std::optional<RawAnswer> RawClient::read_answer(bool without_body) {
  std::size_t end = 0;
  while ((end = received_.find("\r\n\r\n")) == std::string::npos)
    if (!read_some()) return std::nullopt;
  RawAnswer answer;
  answer.head = received_.substr(0, end + 2);
  received_.erase(0, end + 4);
  answer.status = std::stoi(answer.head.substr(9, 3));
  const std::string length = answer.header("Content-Length");
  if (without_body || length.empty()) return answer;
  const std::size_t bytes = std::stoul(length);
  while (received_.size() < bytes)
    if (!read_some()) return std::nullopt;
  answer.body = received_.substr(0, bytes);
  received_.erase(0, bytes);
  return answer;
}

bool RawClient::is_closed_by_peer() {
  pollfd waited{socket_, POLLIN, 0};
  if (::poll(&waited, 1, patience_ms) != 1) return false;
  char byte = 0;
  return ::recv(socket_, &byte, 1, 0) <= 0;
}

std::optional<RawAnswer> ask(const std::string& endpoint, const std::string& request) {
  RawClient client(endpoint);
  client.send(request);
  return client.read_answer(request.starts_with("HEAD"));
}

bool becomes_true(const std::function<bool()>& condition) {
  for (int waited_ms = 0; waited_ms < patience_ms; waited_ms += 5) {
    if (condition()) return true;
    std::this_thread::sleep_for(std::chrono::milliseconds(5));
  }
  return condition();
}

}  // namespace nightweigh::http

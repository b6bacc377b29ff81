#include "daemon/http/client.h"

#include <arpa/inet.h>
#include <doctest/doctest.h>
#include <netinet/in.h>
#include <poll.h>
#include <sys/socket.h>
#include <unistd.h>

#include <filesystem>

#include "tests/unit/daemon/http/live_server.h"

using namespace nightweigh;
using namespace nightweigh::http;
using std::chrono::seconds;

namespace {

// Listens on a free port, answers one connection with fixed bytes (or nothing), then waits for the peer to
// leave.
class FixedPeer {
 public:
  explicit FixedPeer(std::string bytes) {
    listener_ = ::socket(AF_INET, SOCK_STREAM | SOCK_CLOEXEC, 0);
    sockaddr_in address{};
    address.sin_family = AF_INET;
    address.sin_addr.s_addr = htonl(INADDR_LOOPBACK);
    REQUIRE(::bind(listener_, reinterpret_cast<const sockaddr*>(&address), sizeof(address)) == 0);
    REQUIRE(::listen(listener_, 1) == 0);
    socklen_t size = sizeof(address);
    REQUIRE(::getsockname(listener_, reinterpret_cast<sockaddr*>(&address), &size) == 0);
    port_ = ntohs(address.sin_port);
    thread_ = std::thread([this, bytes = std::move(bytes)] {
      const int peer = ::accept(listener_, nullptr, nullptr);
      const bool closes_at_once = bytes == "close";
      if (!closes_at_once) {
        ::send(peer, bytes.data(), bytes.size(), MSG_NOSIGNAL);
        char byte = 0;
        while (::recv(peer, &byte, 1, 0) > 0) {
        }
      }
      ::close(peer);
    });
  }
  FixedPeer(const FixedPeer&) = delete;
  FixedPeer& operator=(const FixedPeer&) = delete;
  ~FixedPeer() {
    thread_.join();
    ::close(listener_);
  }
  std::string endpoint() const { return "127.0.0.1:" + std::to_string(port_); }

 private:
  int listener_ = -1;
  int port_ = 0;
  std::thread thread_;
};

}  // namespace

TEST_CASE("the client reads an answer over TCP, by address and by localhost") {
  LiveServer server;
  for (const std::string& endpoint : {server.endpoint(), "localhost:" + std::to_string(server.port())}) {
    const Result<Answer> answer = get(endpoint, "/hello");
    REQUIRE(answer);
    CHECK(answer->status == 200);
    CHECK(answer->content_type == "application/json");
    CHECK(answer->body == "{\"hello\":\"world\"}");
  }
  const Result<Answer> large = get(server.endpoint(), "/large");
  REQUIRE(large);
  CHECK(large->body.size() == 3u << 20);
  const Result<Answer> unknown = get(server.endpoint(), "/nowhere?limit=10");
  REQUIRE(unknown);
  CHECK(unknown->status == 404);
  CHECK(unknown->content_type == "application/problem+json");
}

TEST_CASE("the client reads an answer over IPv6, where the machine has it") {
  const int probe = ::socket(AF_INET6, SOCK_STREAM | SOCK_CLOEXEC, 0);
  sockaddr_in6 address{};
  address.sin6_family = AF_INET6;
  address.sin6_addr = in6addr_loopback;
  const bool has_v6 =
      probe >= 0 && ::bind(probe, reinterpret_cast<const sockaddr*>(&address), sizeof(address)) == 0;
  if (probe >= 0) ::close(probe);
  if (!has_v6) {
    MESSAGE("this machine has no IPv6 loopback: nothing was checked");
    return;
  }
  ServerSettings settings;
  settings.address = "::1";
  LiveServer server(settings);
  CHECK(server.endpoint().starts_with("[::1]:"));
  const Result<Answer> answer = get(server.endpoint(), "/hello");
  REQUIRE(answer);
  CHECK(answer->status == 200);
}

TEST_CASE("the client reads an answer over a Unix-domain socket and says when there is none") {
  const auto path =
      std::filesystem::temp_directory_path() / ("nightweigh_client_" + std::to_string(::getpid()) + ".sock");
  {
    ServerSettings settings;
    settings.path = path;
    LiveServer server(settings);
    const Result<Answer> answer = get("unix:" + path.string(), "/echo/word");
    REQUIRE(answer);
    CHECK(answer->status == 200);
    CHECK(answer->body.find("\"host\":\"localhost\"") != std::string::npos);
  }
  const Result<Answer> none = get("unix:" + path.string(), "/hello");
  REQUIRE_FALSE(none);
  CHECK(none.error().kind == ErrorKind::not_found);
  CHECK(none.error().remedy.find("nightweigh serve") != std::string::npos);
}

TEST_CASE("a service that is not there, is silent, breaks off or speaks something else") {
  std::string closed;
  {
    LiveServer server;
    closed = server.endpoint();
  }
  const Result<Answer> refused = get(closed, "/hello");
  REQUIRE_FALSE(refused);
  CHECK(refused.error().kind == ErrorKind::not_found);
  CHECK(refused.error().message().find(closed) != std::string::npos);
  CHECK(refused.error().remedy.find("nightweigh serve") != std::string::npos);

  {
    FixedPeer silent("");
    const Result<Answer> answer = get(silent.endpoint(), "/hello", seconds(1));
    REQUIRE_FALSE(answer);
    CHECK(answer.error().kind == ErrorKind::busy);
    CHECK(answer.error().problem == "has not answered within 1 s");
  }
  {
    FixedPeer half("HTTP/1.1 200 OK\r\nContent-Length: 100\r\n\r\nhalf");
    CHECK(get(half.endpoint(), "/hello", seconds(1)).error().kind == ErrorKind::busy);
  }
  {
    FixedPeer leaving("close");
    const Result<Answer> answer = get(leaving.endpoint(), "/hello", seconds(10));
    REQUIRE_FALSE(answer);
    CHECK(answer.error().kind == ErrorKind::busy);
    CHECK(answer.error().problem == "the connection broke");
  }
  {
    FixedPeer other("220 mail.example ready\r\n");
    CHECK(get(other.endpoint(), "/hello", seconds(10)).error().kind == ErrorKind::corrupted);
  }
  {
    FixedPeer huge("HTTP/1.1 200 OK\r\nContent-Length: 300000000\r\n\r\nx");
    CHECK(get(huge.endpoint(), "/hello", seconds(10)).error().kind == ErrorKind::limit);
  }
}

TEST_CASE("endpoints and targets that are none") {
  for (const std::string endpoint :
       {"", "127.0.0.1", "127.0.0.1:", "127.0.0.1:0", "127.0.0.1:65536", "127.0.0.1:80x", "example.org:80",
        "::1:8420", "[127.0.0.1]:80", "unix:"}) {
    CAPTURE(endpoint);
    const Result<Answer> answer = get(endpoint, "/");
    REQUIRE_FALSE(answer);
    CHECK(answer.error().kind == ErrorKind::bad_settings);
  }
  for (const std::string target : {"", "hello", "/a b", "/a\r\nX: y", "/caf\xC3\xA9"}) {
    CAPTURE(target);
    const Result<Answer> answer = get("127.0.0.1:1", target);
    REQUIRE_FALSE(answer);
    CHECK(answer.error().kind == ErrorKind::bad_input);
  }
}

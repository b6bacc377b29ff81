// The feed socket and its client, over real sockets.
#include <sys/resource.h>
#include <sys/socket.h>
#include <sys/stat.h>
#include <sys/un.h>
#include <unistd.h>

#include <boost/asio/buffer.hpp>
#include <boost/asio/ip/tcp.hpp>
#include <boost/asio/write.hpp>
#include <nlohmann/json.hpp>
#include <stdexcept>

#include "daemon/feed/client.h"
#include "daemon/feed/socket_server.h"
#include "expect.h"
#include "network.h"

namespace nightweigh::feed {
namespace {

namespace asio = boost::asio;
using asio::ip::tcp;
using nlohmann::json;

SocketSettings tcp_settings() {
  SocketSettings settings;
  settings.address = "127.0.0.1";
  return settings;
}

// A running server; stopped, and seen to have stopped, at the end.
struct Running {
  explicit Running(SocketSettings settings = tcp_settings()) : runner(network.io) {
    auto opened = SocketServer::open(network.io, std::move(settings), runner.deliver(), runner.report());
    INFO((opened ? std::string() : opened.error().message()));
    REQUIRE(opened.has_value());
    server = std::move(*opened);
    server->start();
  }
  ~Running() {
    server->stop();
    CHECK(eventually([&] { return server->stopped(); }));
  }
  std::string endpoint() const { return server->endpoint(); }
  std::uint16_t port() const {
    return static_cast<std::uint16_t>(std::stoi(endpoint().substr(endpoint().rfind(':') + 1)));
  }
  Network network;
  FakeRunner runner;
  std::unique_ptr<SocketServer> server;
};

// A plain blocking connection; a read that takes 30 s fails the test instead of hanging it.
class Peer {
 public:
  explicit Peer(std::uint16_t port) : socket_(io_) {
    socket_.connect(tcp::endpoint(asio::ip::address_v4::loopback(), port));
    const timeval limit{30, 0};
    ::setsockopt(socket_.native_handle(), SOL_SOCKET, SO_RCVTIMEO, &limit, sizeof limit);
  }
  // False when the other side has closed.
  bool send(std::string_view text) {
    boost::system::error_code ec;
    asio::write(socket_, asio::buffer(text.data(), text.size()), ec);
    return !ec;
  }
  // The next line; nullopt at the end of the connection.
  std::optional<std::string> line() {
    for (;;) {
      const std::size_t newline = received_.find('\n');
      if (newline != std::string::npos) {
        std::string out = received_.substr(0, newline);
        received_.erase(0, newline + 1);
        return out;
      }
      char chunk[4096];
      const ssize_t got = ::recv(socket_.native_handle(), chunk, sizeof chunk, 0);
      if (got <= 0) return std::nullopt;
      received_.append(chunk, static_cast<std::size_t>(got));
    }
  }
  json answer() {
    const auto text = line();
    REQUIRE(text.has_value());
    return json::parse(*text);
  }
  void finish_writing() { socket_.shutdown(tcp::socket::shutdown_send); }
  void close() { socket_.close(); }

 private:
  asio::io_context io_;
  tcp::socket socket_;
  std::string received_;
};

TEST_CASE("lines in, acknowledgements out, in order") {
  Running running;
  Peer peer(running.port());
  SUBCASE("several lines in one packet, empty ones ignored, CR dropped") {
    peer.send("one\n\n\r\ntwo\r\nthree\n");
  }
  SUBCASE("byte by byte") {
    for (const char c : std::string("one\ntwo\nthree\n")) {
      peer.send(std::string(1, c));
      std::this_thread::sleep_for(std::chrono::milliseconds(1));
    }
  }
  SUBCASE("lines that lie across packets") {
    peer.send("one\ntw");
    CHECK(eventually([&] { return running.runner.count() == 1; }));
    peer.send("o\nth");
    peer.send("ree\n");
  }
  SUBCASE("the sender closes its side after the last newline") {
    peer.send("one\ntwo\nthree\n");
    peer.finish_writing();
  }
  for (std::size_t number = 1; number <= 3; ++number) {
    const json answer = peer.answer();
    CHECK(answer["status"] == "taken");
    CHECK(answer["rows"] == number);
  }
  const auto deliveries = running.runner.deliveries();
  REQUIRE(deliveries.size() == 3);
  CHECK(deliveries[0].bytes == "one");
  CHECK(deliveries[1].bytes == "two");
  CHECK(deliveries[2].bytes == "three");
  CHECK(deliveries[0].is_json);
  CHECK(deliveries[0].source == "socket: connection 1");
}

TEST_CASE("a line that the end of the connection cuts off is not delivered") {
  Running running;
  {
    Peer peer(running.port());
    peer.send("{\"closes\":[");
    peer.close();
  }
  Peer half(running.port());
  half.send("good\n{\"closes\":[");
  half.finish_writing();
  CHECK(half.answer()["status"] == "taken");
  const json answer = half.answer();  // whoever still listens is told
  CHECK(answer["status"] == "refused");
  CHECK(contains(answer["errors"][0]["problem"].get<std::string>(), "ended before the line did"));
  CHECK_FALSE(half.line().has_value());
  CHECK(running.runner.count() == 1);
}

TEST_CASE("a line without end is refused at the limit, and the next connection is served") {
  SocketSettings settings = tcp_settings();
  settings.limits.line_bytes_max = 100'000;
  Running running(settings);
  Peer peer(running.port());
  std::thread writer([&] {
    const std::string chunk(100'000, '[');
    for (int i = 0; i < 700 && peer.send(chunk); ++i) {  // 70 MB, if nobody stops it
    }
  });
  const json answer = peer.answer();
  writer.join();
  CHECK(answer["status"] == "refused");
  CHECK(answer["errors"][0]["kind"] == "limit");
  CHECK(contains(answer["errors"][0]["problem"].get<std::string>(), "longer than the limit of 100000 bytes"));
  CHECK_FALSE(peer.line().has_value());
  CHECK(running.runner.count() == 0);
  Peer next(running.port());
  next.send(std::string(100'000, 'x') + "\n");  // exactly the limit
  CHECK(next.answer()["status"] == "taken");
  next.send(std::string(100'001, 'x') + "\n");
  CHECK(next.answer()["errors"][0]["kind"] == "limit");
}

TEST_CASE("connections beyond the bound are told so") {
  SocketSettings settings = tcp_settings();
  settings.connections_max = 2;
  Running running(settings);
  std::optional<Peer> first(running.port());
  Peer second(running.port());
  first->send("one\n");
  first->answer();
  second.send("two\n");
  second.answer();
  {
    Peer third(running.port());
    third.send("three\n");
    const json answer = third.answer();
    CHECK(answer["status"] == "refused");
    CHECK(answer["errors"][0]["kind"] == "busy");
    CHECK_FALSE(third.line().has_value());
  }
  first.reset();
  // A place is free again as soon as the server has seen the end.
  CHECK(eventually([&] {
    Peer again(running.port());
    again.send("again\n");
    return again.answer()["status"] == "taken";
  }));
  second.send("still there\n");
  CHECK(second.answer()["status"] == "taken");
}

TEST_CASE("an idle connection is closed, one that sends is not") {
  SocketSettings settings = tcp_settings();
  settings.idle_limit = std::chrono::milliseconds(400);
  Running running(settings);
  Peer idle(running.port());
  idle.send("half a li");
  CHECK_FALSE(idle.line().has_value());
  Peer busy(running.port());
  for (int i = 0; i < 5; ++i) {
    std::this_thread::sleep_for(std::chrono::milliseconds(100));
    busy.send("x");
  }
  busy.send("\n");
  CHECK(busy.answer()["status"] == "taken");
}

TEST_CASE("an answer that nobody reads ends the connection") {
  SocketSettings settings = tcp_settings();
  settings.write_limit = std::chrono::milliseconds(200);
  Running running(settings);
  running.runner.answer = [](const std::string&, std::size_t) {
    return refusal(std::string(16 << 20, 'd'), {});  // more than the kernel's buffers hold
  };
  Peer peer(running.port());
  peer.send("one\ntwo\n");
  CHECK(eventually([&] { return running.runner.count() == 1; }));
  std::this_thread::sleep_for(std::chrono::seconds(4));
  while (peer.line().has_value()) {
  }
  CHECK(running.runner.count() == 1);  // the second line was never taken
}

TEST_CASE("a failure of the runner is an answer, not the end") {
  Running running;
  running.runner.answer = [](const std::string& bytes, std::size_t) -> Acknowledgement {
    if (bytes == "bad") throw std::runtime_error("the disk is on fire");
    return {Acknowledgement::Status::known, "", 0, {}, {}};
  };
  Peer peer(running.port());
  peer.send("bad\ngood\n");
  const json answer = peer.answer();
  CHECK(answer["status"] == "refused");
  CHECK(answer["errors"][0]["kind"] == "storage");
  CHECK(answer["errors"][0]["value"] == "the disk is on fire");
  CHECK(peer.answer()["status"] == "known");
  CHECK(running.runner.lines().size() == 1);
}

TEST_CASE("stop answers the batch in hand and closes the rest") {
  Running running;
  running.runner.delay = std::chrono::milliseconds(300);
  Peer working(running.port()), idle(running.port());
  idle.send("half");
  working.send("one\ntwo\n");
  CHECK(eventually([&] { return running.runner.count() == 1; }));
  running.server->stop();
  CHECK_FALSE(idle.line().has_value());
  CHECK(working.answer()["status"] == "taken");
  CHECK_FALSE(working.line().has_value());
  CHECK(eventually([&] { return running.server->stopped(); }));
  CHECK(running.runner.count() == 1);
  CHECK_THROWS(Peer(running.port()));
}

TEST_CASE("addresses: in use, not loopback, IPv6") {
  Running running;
  SocketSettings settings = tcp_settings();
  settings.port = running.port();
  auto again = SocketServer::open(running.network.io, settings, running.runner.deliver());
  REQUIRE_FALSE(again.has_value());
  CHECK(again.error().kind == ErrorKind::busy);
  CHECK(contains(again.error().message(), running.endpoint()));
  for (const std::string address : {"0.0.0.0", "192.0.2.1", "localhost", "127.0.0.1 "}) {
    settings.address = address;
    auto refused = SocketServer::open(running.network.io, settings, running.runner.deliver());
    REQUIRE_FALSE(refused.has_value());
    CHECK(refused.error().kind == ErrorKind::bad_settings);
    CHECK(contains(refused.error().message(), address));
  }
  settings.address = "::1";
  settings.port = 0;
  auto six = SocketServer::open(running.network.io, settings, running.runner.deliver());
  if (!six) {
    MESSAGE("no IPv6 here: " << six.error().message());
    return;
  }
  (*six)->start();
  CHECK((*six)->endpoint().substr(0, 6) == "[::1]:");
  CHECK(send_line((*six)->endpoint(), "one").has_value());
  (*six)->stop();
  CHECK(eventually([&] { return (*six)->stopped(); }));
}

TEST_CASE("Unix-domain socket: mode, stale file, live file, other file") {
  const TestFolder folder;
  SocketSettings settings;
  settings.path = folder.path / "feed.sock";
  const auto listening = [&] { return std::filesystem::exists(settings.path); };

  // What a killed process leaves: a bound socket file that nobody listens on.
  const int stale = ::socket(AF_UNIX, SOCK_STREAM, 0);
  sockaddr_un address{};
  address.sun_family = AF_UNIX;
  settings.path.string().copy(address.sun_path, sizeof address.sun_path - 1);
  REQUIRE(::bind(stale, reinterpret_cast<const sockaddr*>(&address), sizeof address) == 0);
  ::close(stale);
  REQUIRE(listening());
  {
    Running running(settings);
    CHECK(running.endpoint() == "unix:" + settings.path.string());
    struct stat status {};
    REQUIRE(::stat(settings.path.c_str(), &status) == 0);
    CHECK((status.st_mode & 0777) == 0600);
    const auto answer = send_line(running.endpoint(), "one");
    INFO((answer ? std::string() : answer.error().message()));
    REQUIRE(answer.has_value());
    CHECK(json::parse(*answer)["status"] == "taken");

    auto second = SocketServer::open(running.network.io, settings, running.runner.deliver());
    REQUIRE_FALSE(second.has_value());
    CHECK(second.error().kind == ErrorKind::busy);
    CHECK(listening());
    CHECK(send_line(running.endpoint(), "two").has_value());
  }
  CHECK_FALSE(listening());

  write_text(settings.path, "precious");
  Network network;
  FakeRunner runner(network.io);
  auto refused = SocketServer::open(network.io, settings, runner.deliver());
  REQUIRE_FALSE(refused.has_value());
  CHECK(contains(refused.error().message(), "is a file that is no socket"));
  CHECK(read_text(settings.path) == "precious");
  settings.path = folder.path / std::string(150, 'x');
  CHECK_FALSE(SocketServer::open(network.io, settings, runner.deliver()).has_value());
}

TEST_CASE("client: a whole exchange, and a refusal that comes before the line is written") {
  SocketSettings settings = tcp_settings();
  settings.limits.line_bytes_max = 1000;
  Running running(settings);
  const auto answer = send_line(running.endpoint(), "{}");
  REQUIRE(answer.has_value());
  CHECK(json::parse(*answer)["status"] == "taken");
  CHECK(running.runner.deliveries().at(0).bytes == "{}");
  const auto refused = send_line(running.endpoint(), std::string(20 << 20, 'x'));
  INFO((refused ? std::string() : refused.error().message()));
  REQUIRE(refused.has_value());
  CHECK(json::parse(*refused)["errors"][0]["kind"] == "limit");
}

TEST_CASE("client: what can go wrong") {
  for (const std::string bad :
       {"", "127.0.0.1", "127.0.0.1:", "127.0.0.1:0", "127.0.0.1:70000", "127.0.0.1:12x", "localhost:8421",
        "::1:8421", "[127.0.0.1]:8421", "unix:", ":8421"}) {
    const auto result = send_line(bad, "{}");
    REQUIRE_FALSE(result.has_value());
    CHECK(result.error().kind == ErrorKind::bad_input);
    CHECK(contains(result.error().message(), "Write it like"));
  }
  CHECK_FALSE(send_line("127.0.0.1:1", "").has_value());
  CHECK_FALSE(send_line("127.0.0.1:1", "a\nb").has_value());

  const TestFolder folder;
  const auto nobody = send_line("unix:" + (folder.path / "none").string(), "{}");
  REQUIRE_FALSE(nobody.has_value());
  CHECK(nobody.error().kind == ErrorKind::not_found);
  CHECK(contains(nobody.error().message(), "Start the service with `nightweigh serve`"));

  // A port on which surely nobody listens: one that was just given back.
  asio::io_context io;
  tcp::acceptor acceptor(io, tcp::endpoint(asio::ip::address_v4::loopback(), 0));
  const std::string endpoint = "127.0.0.1:" + std::to_string(acceptor.local_endpoint().port());
  SUBCASE("nobody listens") {
    acceptor.close();
    const auto result = send_line(endpoint, "{}");
    REQUIRE_FALSE(result.has_value());
    CHECK(result.error().kind == ErrorKind::not_found);
  }
  SUBCASE("no answer in time") {
    const auto result = send_line(endpoint, "{}", {std::chrono::seconds(5), std::chrono::milliseconds(200)});
    REQUIRE_FALSE(result.has_value());
    CHECK(result.error().kind == ErrorKind::busy);
  }
  SUBCASE("the connection breaks") {
    std::thread breaker([&] { acceptor.accept().close(); });
    const auto result = send_line(endpoint, "{}");
    breaker.join();
    REQUIRE_FALSE(result.has_value());
    CHECK(result.error().kind == ErrorKind::storage);
    CHECK(contains(result.error().message(), "Send the batch again"));
  }
}

TEST_CASE("out of descriptors: no spinning, and service again afterwards") {
  Running running;
  Peer waiting(running.port());  // a connection made before the descriptors are gone
  waiting.send("one\n");
  waiting.answer();
  rlimit before{};
  REQUIRE(::getrlimit(RLIMIT_NOFILE, &before) == 0);
  // The peer's socket gets its number first; then no higher one may be opened.
  asio::io_context io;
  tcp::socket late(io);
  late.open(tcp::v4());
  const int lowest_free = ::dup(0);
  ::close(lowest_free);
  const rlimit none{static_cast<rlim_t>(lowest_free), before.rlim_max};
  REQUIRE(::setrlimit(RLIMIT_NOFILE, &none) == 0);
  boost::system::error_code ec;
  late.connect(tcp::endpoint(asio::ip::address_v4::loopback(), running.port()), ec);
  const bool told = eventually([&] { return !running.runner.lines().empty(); });
  std::this_thread::sleep_for(std::chrono::milliseconds(350));
  const std::size_t complaints = running.runner.lines().size();
  REQUIRE(::setrlimit(RLIMIT_NOFILE, &before) == 0);
  CHECK_FALSE(ec);
  CHECK(told);
  CHECK(complaints < 20);  // one each 100 ms
  asio::write(late, asio::buffer(std::string("two\n")));
  CHECK(eventually([&] { return running.runner.count() == 2; }));
}

}  // namespace
}  // namespace nightweigh::feed

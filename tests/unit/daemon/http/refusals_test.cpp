// What a malformed, hostile, greedy or slow client gets, and that the server still serves afterwards.
#include <dirent.h>
#include <doctest/doctest.h>
#include <sys/resource.h>

#include <chrono>
#include <ctime>
#include <nlohmann/json.hpp>

#include "tests/unit/daemon/http/live_server.h"

using namespace nightweigh;
using namespace nightweigh::http;
using std::chrono::seconds;

namespace {

void check_serves(const LiveServer& server) {
  const auto answer = ask(server.endpoint(), "GET /hello HTTP/1.1\r\nHost: " + server.host() + "\r\n\r\n");
  REQUIRE(answer);
  CHECK(answer->status == 200);
}

// Sends bytes and checks that the answer is a problem of that status, after which the connection closes.
void check_refused(const LiveServer& server, const std::string& bytes, int status) {
  CAPTURE(shown(bytes, 200));
  RawClient client(server.endpoint());
  client.send(bytes);
  const auto answer = client.read_answer();
  REQUIRE(answer);
  CHECK(answer->status == status);
  CHECK(answer->header("Content-Type") == "application/problem+json");
  CHECK(answer->header("Connection") == "close");
  CHECK(nlohmann::json::parse(answer->body)["status"] == status);
  CHECK(client.is_closed_by_peer());
}

int open_descriptors() {
  int count = 0;
  DIR* const folder = ::opendir("/proc/self/fd");
  while (::readdir(folder) != nullptr) ++count;
  ::closedir(folder);
  return count - 3;  // ".", ".." and the folder itself
}

}  // namespace

TEST_CASE("what is no HTTP is 400") {
  LiveServer server;
  const std::string host = "Host: " + server.host() + "\r\n";
  check_refused(server, "nonsense\r\n\r\n", 400);
  check_refused(server,
                std::string("\x16\x03\x01\x02\x00\x01\x00\x01\xfc\x03\x03", 11) + std::string(64, 'z'), 400);
  check_refused(server, "GET /hello\r\n\r\n", 400);
  check_refused(server, "GET /hello HTTP/2.0\r\n" + host + "\r\n", 400);
  check_refused(server, "GET  /hello HTTP/1.1\r\n" + host + "\r\n", 400);
  check_refused(server, "GET /hello HTTP/1.1\r\n" + host + "Bad Name: x\r\n\r\n", 400);
  check_refused(server, "GET /hello HTTP/1.1\r\n" + host + "Space : x\r\n\r\n", 400);
  check_refused(server, "GET /hello HTTP/1.1\r\n" + host + "no colon here\r\n\r\n", 400);
  check_refused(server, "GET /hello HTTP/1.1\r\n" + host + std::string("Nul: a\0b\r\n\r\n", 12), 400);
  check_refused(server, "GET /hello HTTP/1.1\n" + host + "\r\n", 400);
  check_serves(server);
}

TEST_CASE("requests that two readers could split differently are refused") {
  // RFC 9112, 6.3 and 11.2
  LiveServer server;
  const std::string start = "POST /length HTTP/1.1\r\nHost: " + server.host() + "\r\n";
  check_refused(server, start + "Content-Length: 5\r\nTransfer-Encoding: chunked\r\n\r\n0\r\n\r\n", 400);
  check_refused(server, start + "Transfer-Encoding: chunked\r\nContent-Length: 5\r\n\r\n0\r\n\r\n", 400);
  check_refused(server, start + "Content-Length: 5\r\nTransfer-Encoding: identity\r\n\r\n12345", 400);
  check_refused(server, start + "Content-Length: 5\r\nContent-Length: 6\r\n\r\n123456", 400);
  check_refused(server, start + "Content-Length: 5\r\nContent-Length: 5\r\n\r\n12345", 400);
  check_refused(server, start + "Content-Length: 5, 5\r\n\r\n12345", 400);
  check_refused(server, start + "Content-Length: +5\r\n\r\n12345", 400);
  check_refused(server, start + "Content-Length: -1\r\n\r\n", 400);
  check_refused(server, start + "Content-Length: 0x5\r\n\r\n12345", 400);
  check_refused(server, start + "Content-Length: 99999999999999999999999\r\n\r\n", 400);
  check_refused(server, start + "Content-Length:\r\n\r\n", 400);
  check_refused(server, start + "Transfer-Encoding: gzip\r\n\r\n", 501);
  check_refused(server, start + "Transfer-Encoding: gzip, chunked\r\n\r\n0\r\n\r\n", 501);
  check_refused(server, start + "Transfer-Encoding: xchunked\r\n\r\n0\r\n\r\n", 501);
  check_refused(server, start + "Transfer-Encoding: identity\r\n\r\n", 501);
  check_refused(server, start + "Transfer-Encoding: chunked\r\nTransfer-Encoding: chunked\r\n\r\n0\r\n\r\n",
                400);
  check_refused(server, start + "Transfer-Encoding: chunked\r\n\r\nzz\r\n\r\n", 400);
  check_refused(server, start + "Transfer-Encoding: chunked\r\n\r\n3\r\nabcd\r\n0\r\n\r\n", 400);
  check_refused(
      server,
      "POST /length HTTP/1.0\r\nHost: " + server.host() + "\r\nTransfer-Encoding: chunked\r\n\r\n0\r\n\r\n",
      400);
  check_serves(server);
}

TEST_CASE("nothing behind a refused request is read as a request") {
  LiveServer server;
  RawClient client(server.endpoint());
  const std::string hidden = "GET /echo/hidden HTTP/1.1\r\nHost: " + server.host() + "\r\n\r\n";
  client.send("POST /length HTTP/1.1\r\nHost: " + server.host() +
              "\r\nContent-Length: 4\r\nTransfer-Encoding: chunked\r\n\r\n0\r\n\r\n" + hidden);
  const auto first = client.read_answer();
  REQUIRE(first);
  CHECK(first->status == 400);
  CHECK_FALSE(client.read_answer());
}

TEST_CASE("exactly one Host, and on the list") {
  LiveServer server;
  const std::string port = std::to_string(server.port());
  const auto with = [](const std::string& headers) { return "GET /hello HTTP/1.1\r\n" + headers + "\r\n"; };
  for (const std::string& host :
       {"127.0.0.1:" + port, "localhost:" + port, "LocalHost:" + port, "[::1]:" + port}) {
    CAPTURE(host);
    const auto answer = ask(server.endpoint(), with("Host: " + host + "\r\n"));
    REQUIRE(answer);
    CHECK(answer->status == 200);
  }
  check_refused(server, with(""), 400);
  check_refused(server, "GET /hello HTTP/1.0\r\n\r\n", 400);
  check_refused(server, with("Host: localhost:" + port + "\r\nHost: localhost:" + port + "\r\n"), 400);
  for (const std::string& host :
       {std::string(""), std::string("localhost"), std::string("127.0.0.1"), "localhost:1" + port,
        "localhost.:" + port, "localhost:" + port + ".example.org", "evil.example:" + port,
        "evil@localhost:" + port, "127.0.0.2:" + port, "0.0.0.0:" + port, "localhost:0" + port,
        "localhost:" + port + ", evil.example"})
    check_refused(server, with("Host: " + host + "\r\n"), 421);
  // absolute form (RFC 9112, 3.2.2): the target's own host counts too
  const std::string good_host = "Host: localhost:" + port + "\r\n";
  const auto absolute =
      ask(server.endpoint(), "GET http://localhost:" + port + "/hello HTTP/1.1\r\n" + good_host + "\r\n");
  REQUIRE(absolute);
  CHECK(absolute->status == 200);
  check_refused(server, "GET http://evil.example/hello HTTP/1.1\r\n" + good_host + "\r\n", 421);
  check_serves(server);
}

TEST_CASE("pages of other origins are refused, ours are not") {
  LiveServer server;
  const std::string port = std::to_string(server.port());
  const auto with = [&](const std::string& origin) {
    return "GET /hello HTTP/1.1\r\nHost: " + server.host() + "\r\nOrigin: " + origin + "\r\n\r\n";
  };
  for (const std::string& origin : {"http://127.0.0.1:" + port, "http://localhost:" + port}) {
    const auto answer = ask(server.endpoint(), with(origin));
    REQUIRE(answer);
    CHECK(answer->status == 200);
    CHECK(answer->head.find("Access-Control") == std::string::npos);
  }
  for (const std::string& origin :
       {std::string("null"), std::string(""), std::string("http://"), std::string("https://example.org"),
        "https://localhost:" + port, std::string("http://localhost"), "http://localhost:" + port + "/",
        "http://localhost:" + port + ".example.org", "http://127.0.0.1:" + port + " http://evil.example"})
    check_refused(server, with(origin), 403);
  check_refused(server,
                "GET /hello HTTP/1.1\r\nHost: " + server.host() + "\r\nOrigin: http://" + server.host() +
                    "\r\nOrigin: http://evil.example\r\n\r\n",
                400);
  check_serves(server);
}

TEST_CASE("CONNECT and TRACE are not supported") {
  LiveServer server;
  check_refused(server, "CONNECT example.org:80 HTTP/1.1\r\nHost: " + server.host() + "\r\n\r\n", 501);
  check_refused(server, "TRACE /hello HTTP/1.1\r\nHost: " + server.host() + "\r\n\r\n", 501);
}

TEST_CASE("bad targets are 400") {
  LiveServer server;
  for (const std::string target : {"/echo/%",      "/echo/%2",       "/echo/%zz",
                                   "/echo/%00",    "/echo/a%0Ab",    "/echo/%FF",
                                   "/echo/a%2Fb",  "/../etc",        "/echo/..",
                                   "/echo/%2e%2E", "/echo/.",        "//hello",
                                   "/echo//a",     "/hello?a=1&a=2", "/hello?a=%4",
                                   "/hello?=1",    "/hello#part",    "*",
                                   "hello",        "/a\\b",          "ftp://localhost/hello"})
    check_refused(server, "GET " + target + " HTTP/1.1\r\nHost: " + server.host() + "\r\n\r\n", 400);
  check_serves(server);
}

TEST_CASE("headers and bodies beyond their limits") {
  ServerSettings settings;
  settings.header_bytes_max = 2048;
  settings.body_bytes_max = 1000;
  LiveServer server(settings);
  const std::string host = "Host: " + server.host() + "\r\n";
  const auto fits =
      ask(server.endpoint(), "GET /hello HTTP/1.1\r\n" + host + "A: " + std::string(1800, 'a') + "\r\n\r\n");
  REQUIRE(fits);
  CHECK(fits->status == 200);
  check_refused(server, "GET /hello HTTP/1.1\r\n" + host + "A: " + std::string(2048, 'a') + "\r\n\r\n", 431);
  check_refused(server, "GET /" + std::string(4000, 'a') + " HTTP/1.1\r\n" + host + "\r\n", 431);
  check_refused(server, "GET /hello HTTP/1.1\r\n" + host + "A: " + std::string(300'000, 'a'),
                431);  // no end in sight
  std::string many = "GET /hello HTTP/1.1\r\n" + host;
  for (int i = 0; i < 500; ++i) many += "A" + std::to_string(i) + ": b\r\n";
  check_refused(server, many + "\r\n", 431);

  const std::string post = "POST /length HTTP/1.1\r\n" + host;
  const auto whole = ask(server.endpoint(), post + "Content-Length: 1000\r\n\r\n" + std::string(1000, 'b'));
  REQUIRE(whole);
  CHECK(whole->status == 200);
  check_refused(server, post + "Content-Length: 1001\r\n\r\n", 413);
  check_refused(server, post + "Content-Length: 300000\r\n\r\n" + std::string(300'000, 'b'), 413);
  check_refused(server, post + "Content-Length: 18446744073709551615\r\n\r\n", 413);
  std::string chunks = post + "Transfer-Encoding: chunked\r\n\r\n";
  for (int i = 0; i < 30; ++i) chunks += "64\r\n" + std::string(100, 'c') + "\r\n";
  check_refused(server, chunks, 413);
  check_refused(server, post + "Expect: 100-continue\r\nContent-Length: 2000\r\n\r\n", 413);
  check_serves(server);
}

TEST_CASE("a client that is still sending a refused body gets the answer, not a broken connection") {
  LiveServer server;
  RawClient client(server.endpoint());
  client.send("POST /length HTTP/1.1\r\nHost: " + server.host() + "\r\nContent-Length: 2000000\r\n\r\n");
  const auto answer = client.read_answer();
  REQUIRE(answer);
  CHECK(answer->status == 413);
  for (int piece = 0; piece < 4; ++piece) {
    CHECK(client.send(std::string(10'000, 'b')));
    std::this_thread::sleep_for(std::chrono::milliseconds(20));  // a reset would have arrived by then
  }
  CHECK(client.is_closed_by_peer());
}

TEST_CASE("a request that dribbles in is cut at its deadline, however often a byte comes") {
  ServerSettings settings;
  settings.read_s = seconds(1);
  LiveServer server(settings);
  const auto began = std::chrono::steady_clock::now();
  RawClient silent(server.endpoint());
  RawClient header(server.endpoint());
  RawClient body(server.endpoint());
  body.send("POST /length HTTP/1.1\r\nHost: " + server.host() + "\r\nContent-Length: 900\r\n\r\n");
  header.send("GET /hello HTTP/1.1\r\nHost: " + server.host() + "\r\nX: ");
  bool header_open = true, body_open = true;
  while ((header_open || body_open) && std::chrono::steady_clock::now() - began < seconds(20)) {
    header_open = header_open && header.send("a");
    body_open = body_open && body.send("b");
    std::this_thread::sleep_for(std::chrono::milliseconds(50));
  }
  CHECK_FALSE(header_open);
  CHECK_FALSE(body_open);
  CHECK(silent.is_closed_by_peer());
  CHECK(std::chrono::steady_clock::now() - began >= std::chrono::milliseconds(900));
  CHECK(std::chrono::steady_clock::now() - began < seconds(10));
  check_serves(server);
}

TEST_CASE("an idle connection is closed after its own time, and each request has its full time") {
  ServerSettings settings;
  settings.read_s = seconds(20);
  settings.idle_s = seconds(1);
  LiveServer server(settings);
  RawClient client(server.endpoint());
  for (int i = 0; i < 3; ++i) {
    client.send("GET /hello HTTP/1.1\r\nHost: " + server.host() + "\r\n\r\n");
    const auto answer = client.read_answer();
    REQUIRE(answer);
  }
  const auto began = std::chrono::steady_clock::now();
  CHECK(client.is_closed_by_peer());
  CHECK(std::chrono::steady_clock::now() - began >= std::chrono::milliseconds(900));
  CHECK(std::chrono::steady_clock::now() - began < seconds(10));
}

TEST_CASE("a client that does not take its answer is cut") {
  ServerSettings settings;
  settings.write_s = seconds(1);
  std::shared_ptr<std::atomic<int>> answered = std::make_shared<std::atomic<int>>(0);
  LiveServer server(settings, [answered](const Request&) -> boost::asio::awaitable<Response> {
    ++*answered;
    Response response;
    response.body.assign(64u << 20, 'x');
    co_return response;
  });
  RawClient client(server.endpoint());
  const std::string request = "GET / HTTP/1.1\r\nHost: " + server.host() + "\r\n\r\n";
  client.send(request);
  REQUIRE(becomes_true([&] { return *answered == 1; }));
  // Takes nothing for longer than write_s: what arrives afterwards is not the whole answer.
  std::this_thread::sleep_for(std::chrono::milliseconds(2500));
  CHECK_FALSE(client.read_answer());
}

TEST_CASE("more connections than the bound are told so; a place that becomes free is used") {
  ServerSettings settings;
  settings.connections_max = 3;
  LiveServer server(settings);
  const std::string request = "GET /hello HTTP/1.1\r\nHost: " + server.host() + "\r\n\r\n";
  std::vector<std::unique_ptr<RawClient>> held;
  for (int i = 0; i < 3; ++i) {
    held.push_back(std::make_unique<RawClient>(server.endpoint()));
    held.back()->send(request);
    REQUIRE(held.back()->read_answer());
  }
  {
    RawClient over(server.endpoint());
    over.send(request);
    const auto answer = over.read_answer();
    REQUIRE(answer);
    CHECK(answer->status == 503);
    CHECK(answer->header("Retry-After") == "1");
    CHECK(over.is_closed_by_peer());
  }
  // A crowd over the bound: each gets a 503 or a close, those inside are not touched.
  std::vector<std::unique_ptr<RawClient>> crowd;
  for (int i = 0; i < 60; ++i) crowd.push_back(std::make_unique<RawClient>(server.endpoint()));
  for (const auto& client : crowd) {
    const auto answer = client->read_answer();
    if (answer) CHECK(answer->status == 503);
  }
  crowd.clear();
  for (const auto& client : held) {
    REQUIRE(client->send(request));
    const auto answer = client->read_answer();
    REQUIRE(answer);
    CHECK(answer->status == 200);
  }
  held.clear();
  CHECK(becomes_true([&] {
    const auto answer = ask(server.endpoint(), request);
    return answer && answer->status == 200;
  }));
}

TEST_CASE("out of descriptors the acceptor waits instead of spinning, and recovers") {
  LiveServer server;
  check_serves(server);
  rlimit before{};
  REQUIRE(::getrlimit(RLIMIT_NOFILE, &before) == 0);
  // Room for the client's end of two connections, not for the server's.
  RawClient first(server.endpoint());
  REQUIRE(becomes_true([&] {  // until the server's end of `first` is counted
    first.send("GET /hello HTTP/1.1\r\nHost: " + server.host() + "\r\n\r\n");
    return first.read_answer().has_value();
  }));
  rlimit tight = before;
  tight.rlim_cur = static_cast<rlim_t>(open_descriptors() + 1);
  REQUIRE(::setrlimit(RLIMIT_NOFILE, &tight) == 0);
  std::optional<RawClient> second;
  second.emplace(server.endpoint());
  second->send("GET /hello HTTP/1.1\r\nHost: " + server.host() + "\r\n\r\n");
  const std::clock_t cpu_before = std::clock();
  std::this_thread::sleep_for(std::chrono::milliseconds(1000));
  const double cpu_s = static_cast<double>(std::clock() - cpu_before) / CLOCKS_PER_SEC;
  REQUIRE(::setrlimit(RLIMIT_NOFILE, &before) == 0);
  // Ten attempts take a few milliseconds; a circle takes a whole second, or its share of a busy machine.
  CHECK(cpu_s < 0.06);
  const auto answer = second->read_answer();
  REQUIRE(answer);
  CHECK(answer->status == 200);
  const auto reports = server.reports();
  REQUIRE(reports.size() == 1);
  CHECK(reports[0].find("cannot accept") != std::string::npos);
}

TEST_CASE("stopping closes idle connections, finishes answers in hand, accepts no more") {
  auto server = std::make_unique<LiveServer>();
  const std::string endpoint = server->endpoint();
  const std::string host = "Host: " + server->host() + "\r\n";
  RawClient idle(endpoint), partial(endpoint), busy(endpoint);
  idle.send("GET /hello HTTP/1.1\r\n" + host + "\r\n");
  REQUIRE(idle.read_answer());
  partial.send("GET /hello HTTP/1.1\r\n" + host);
  busy.send("GET /hello HTTP/1.1\r\n" + host + "\r\n");
  REQUIRE(busy.read_answer());
  busy.send("GET /slow HTTP/1.1\r\n" + host + "\r\n");
  std::this_thread::sleep_for(std::chrono::milliseconds(100));  // so that /slow is in hand
  CHECK_FALSE(server->server().stopped());
  const auto began = std::chrono::steady_clock::now();
  server->server().stop();
  server->server().stop();  // again changes nothing
  const auto answer = busy.read_answer();
  REQUIRE(answer);
  CHECK(answer->body == "{\"slow\":true}");
  CHECK(answer->header("Connection") == "close");
  CHECK(busy.is_closed_by_peer());
  CHECK(idle.is_closed_by_peer());
  CHECK(partial.is_closed_by_peer());
  CHECK(becomes_true([&] { return server->server().stopped(); }));
  CHECK(std::chrono::steady_clock::now() - began < seconds(4));
  server.reset();
}

TEST_CASE("stopping does not wait long for a client that takes nothing") {
  ServerSettings settings;
  settings.stop_s = seconds(1);
  auto server =
      std::make_unique<LiveServer>(settings, [](const Request&) -> boost::asio::awaitable<Response> {
        Response response;
        response.body.assign(64u << 20, 'x');
        co_return response;
      });
  RawClient client(server->endpoint());
  client.send("GET / HTTP/1.1\r\nHost: " + server->host() + "\r\n\r\n");
  std::this_thread::sleep_for(std::chrono::milliseconds(200));
  const auto began = std::chrono::steady_clock::now();
  server->server().stop();
  CHECK(becomes_true([&] { return server->server().stopped(); }));
  CHECK(std::chrono::steady_clock::now() - began < seconds(10));
}

TEST_CASE("clients that leave at any point do no harm") {
  LiveServer server;
  const std::string whole =
      "POST /length HTTP/1.1\r\nHost: " + server.host() +
      "\r\nContent-Length: 5\r\n\r\n12345GET /large HTTP/1.1\r\nHost: " + server.host() + "\r\n\r\n";
  for (std::size_t cut = 0; cut <= whole.size(); ++cut) {
    RawClient client(server.endpoint());
    client.send(whole.substr(0, cut));
  }
  check_serves(server);
}

TEST_CASE("a request may arrive byte by byte") {
  LiveServer server;
  RawClient client(server.endpoint());
  const std::string request = "POST /length HTTP/1.1\r\nHost: " + server.host() +
                              "\r\nTransfer-Encoding: chunked\r\n\r\n3\r\nabc\r\n0\r\n\r\n";
  for (const char byte : request) REQUIRE(client.send(std::string(1, byte)));
  const auto answer = client.read_answer();
  REQUIRE(answer);
  CHECK(answer->body == R"({"head":"abc","length":3})");
}

TEST_CASE("an io_context that ends without stop() takes connections in any state with it") {
  boost::asio::io_context io;
  ServerSettings settings;
  settings.address = "127.0.0.1";
  Result<std::unique_ptr<Server>> server = Server::open(io, settings, sample_handler());
  REQUIRE(server);
  (*server)->start();
  const std::string endpoint = (*server)->endpoint();
  std::thread thread([&io] { io.run(); });
  RawClient silent(endpoint), idle(endpoint), busy(endpoint);
  idle.send("GET /hello HTTP/1.1\r\nHost: " + endpoint + "\r\n\r\n");
  CHECK(idle.read_answer());
  busy.send("GET /slow HTTP/1.1\r\nHost: " + endpoint + "\r\n\r\n");
  std::this_thread::sleep_for(std::chrono::milliseconds(50));
  io.stop();
  thread.join();
  server->reset();
}

// What a well-behaved client sees.
#include <doctest/doctest.h>
#include <sys/socket.h>
#include <sys/un.h>
#include <unistd.h>

#include <filesystem>
#include <fstream>
#include <nlohmann/json.hpp>

#include "daemon/http/entity_tag.h"
#include "tests/unit/daemon/http/live_server.h"

using namespace nightweigh;
using namespace nightweigh::http;

namespace {

std::string get_request(const LiveServer& server, const std::string& target, const std::string& more = "") {
  return "GET " + target + " HTTP/1.1\r\nHost: " + server.host() + "\r\n" + more + "\r\n";
}

}  // namespace

TEST_CASE("an answer carries its type, its length and the headers that every answer has") {
  LiveServer server;
  const auto answer = ask(server.endpoint(), get_request(server, "/hello"));
  REQUIRE(answer);
  CHECK(answer->head.starts_with("HTTP/1.1 200 OK\r\n"));
  CHECK(answer->body == "{\"hello\":\"world\"}");
  CHECK(answer->header("Content-Type") == "application/json");
  CHECK(answer->header("Content-Length") == "17");
  CHECK(answer->header("X-Content-Type-Options") == "nosniff");
  CHECK(answer->header("Cache-Control") == "no-store");
  CHECK(answer->header("Server") == "nightweigh");
  CHECK(answer->header("Access-Control-Allow-Origin").empty());
  // RFC 9110, 5.6.7: "Sun, 06 Nov 1994 08:49:37 GMT" has 29 characters.
  CHECK(answer->header("Date").size() == 29);
  CHECK(answer->header("Date").ends_with(" GMT"));
}

TEST_CASE("a connection serves one request after the other") {
  LiveServer server;
  RawClient client(server.endpoint());
  for (int i = 0; i < 5; ++i) {
    REQUIRE(client.send(get_request(server, "/echo/" + std::to_string(i))));
    const auto answer = client.read_answer();
    REQUIRE(answer);
    CHECK(nlohmann::json::parse(answer->body)["word"] == std::to_string(i));
  }
  REQUIRE(client.send(get_request(server, "/hello", "Connection: close\r\n")));
  const auto last = client.read_answer();
  REQUIRE(last);
  CHECK(last->header("Connection") == "close");
  CHECK(client.is_closed_by_peer());
}

TEST_CASE("pipelined requests are answered in their order, a slow one first included") {
  LiveServer server;
  RawClient client(server.endpoint());
  const std::string post =
      "POST /length HTTP/1.1\r\nHost: " + server.host() + "\r\nContent-Length: 5\r\n\r\n12345";
  REQUIRE(client.send(get_request(server, "/slow") + post + get_request(server, "/echo/third") +
                      get_request(server, "/nowhere") + get_request(server, "/echo/fifth")));
  const auto first = client.read_answer();
  const auto second = client.read_answer();
  const auto third = client.read_answer();
  const auto fourth = client.read_answer();
  const auto fifth = client.read_answer();
  REQUIRE((first && second && third && fourth && fifth));
  CHECK(first->body == "{\"slow\":true}");
  CHECK(nlohmann::json::parse(second->body)["length"] == 5);
  CHECK(nlohmann::json::parse(third->body)["word"] == "third");
  CHECK(fourth->status == 404);
  CHECK(nlohmann::json::parse(fifth->body)["word"] == "fifth");
}

TEST_CASE("many pipelined requests, more than the buffer holds") {
  LiveServer server;
  RawClient client(server.endpoint());
  constexpr int count = 400;
  std::string all;
  for (int i = 0; i < count; ++i)
    all += get_request(server, "/echo/" + std::to_string(i), "X-Filler: " + std::string(500, 'f') + "\r\n");
  std::thread sender([&] { client.send(all); });
  int in_order = 0;
  for (int i = 0; i < count; ++i) {
    const auto answer = client.read_answer();
    if (!answer) break;
    in_order += nlohmann::json::parse(answer->body)["word"] == std::to_string(i) ? 1 : 0;
  }
  sender.join();
  CHECK(in_order == count);
}

TEST_CASE("HEAD gets the headers of GET and no body") {
  LiveServer server;
  RawClient client(server.endpoint());
  REQUIRE(client.send("HEAD /hello HTTP/1.1\r\nHost: " + server.host() + "\r\n\r\n" +
                      get_request(server, "/hello")));
  const auto head = client.read_answer(true);
  REQUIRE(head);
  CHECK(head->status == 200);
  CHECK(head->header("Content-Length") == "17");
  const auto next = client.read_answer();  // would be garbage if a body had been sent
  REQUIRE(next);
  CHECK(next->body == "{\"hello\":\"world\"}");
  const auto refused = ask(server.endpoint(), "HEAD /hello HTTP/1.1\r\nHost: elsewhere\r\n\r\n");
  REQUIRE(refused);
  CHECK(refused->status == 421);
}

TEST_CASE("HTTP/1.0 clients get an answer of their version and a close") {
  LiveServer server;
  RawClient client(server.endpoint());
  REQUIRE(client.send("GET /hello HTTP/1.0\r\nHost: " + server.host() + "\r\n\r\n"));
  const auto answer = client.read_answer();
  REQUIRE(answer);
  CHECK(answer->head.starts_with("HTTP/1.0 200"));
  CHECK(client.is_closed_by_peer());
}

TEST_CASE("an answer larger than one piece arrives whole") {
  LiveServer server;
  const auto answer = ask(server.endpoint(), get_request(server, "/large"));
  REQUIRE(answer);
  CHECK(answer->body == std::string(3u << 20, 'x'));
}

TEST_CASE("bodies: by length, in chunks, after 100-continue") {
  LiveServer server;
  const std::string start = "POST /length HTTP/1.1\r\nHost: " + server.host() + "\r\n";
  const auto by_length = ask(server.endpoint(), start + "Content-Length: 3\r\n\r\nabc");
  REQUIRE(by_length);
  CHECK(by_length->body == R"({"head":"abc","length":3})");
  const auto in_chunks =
      ask(server.endpoint(),
          start + "Transfer-Encoding: chunked\r\n\r\n3\r\nabc\r\nA\r\n0123456789\r\n0\r\n\r\n");
  REQUIRE(in_chunks);
  CHECK(in_chunks->body == R"({"head":"abc0123456789","length":13})");

  RawClient client(server.endpoint());
  REQUIRE(client.send(start + "Content-Length: 3\r\nExpect: 100-continue\r\n\r\n"));
  const auto go_on = client.read_answer();
  REQUIRE(go_on);
  CHECK(go_on->status == 100);
  REQUIRE(client.send("xyz"));
  const auto answer = client.read_answer();
  REQUIRE(answer);
  CHECK(answer->body == R"({"head":"xyz","length":3})");
  const auto other = ask(server.endpoint(), start + "Content-Length: 3\r\nExpect: a-miracle\r\n\r\n");
  REQUIRE(other);
  CHECK(other->status == 417);
}

TEST_CASE("trailers of a chunked body add no headers") {
  LiveServer server(ServerSettings{}, [](const Request& request) -> boost::asio::awaitable<Response> {
    Response response;
    response.body = nlohmann::json(request.headers).dump();
    co_return response;
  });
  const auto answer = ask(server.endpoint(), "POST / HTTP/1.1\r\nHost: " + server.host() +
                                                 "\r\nTransfer-Encoding: chunked\r\n\r\n1\r\na\r\n0\r\n"
                                                 "Authorization: Bearer late\r\n\r\n");
  REQUIRE(answer);
  CHECK(answer->status == 200);
  CHECK_FALSE(nlohmann::json::parse(answer->body).contains("authorization"));
}

TEST_CASE("the handler sees decoded paths, queries and joined headers") {
  LiveServer server;
  const auto answer =
      ask(server.endpoint(), get_request(server, "/echo/caf%C3%A9?from=2026-01-02&note=a+b%26c&flag",
                                         "If-None-Match: \"a\"\r\nIf-None-Match: \"b\"\r\n"));
  REQUIRE(answer);
  const auto seen = nlohmann::json::parse(answer->body);
  CHECK(seen["word"] == "caf\xC3\xA9");
  CHECK(seen["path"] == "/echo/caf\xC3\xA9");
  CHECK(seen["query"] == nlohmann::json({{"from", "2026-01-02"}, {"note", "a b&c"}, {"flag", ""}}));
  CHECK(seen["headers"]["if-none-match"] == "\"a\", \"b\"");
}

TEST_CASE("unknown paths and methods are problem documents") {
  LiveServer server;
  const auto unknown = ask(server.endpoint(), get_request(server, "/v1/nowhere"));
  REQUIRE(unknown);
  CHECK(unknown->status == 404);
  CHECK(unknown->header("Content-Type") == "application/problem+json");
  const auto document = nlohmann::json::parse(unknown->body);
  CHECK(document["type"] == "about:blank");
  CHECK(document["title"] == "Not Found");
  CHECK(document["status"] == 404);
  CHECK(document["detail"].get<std::string>().find("/v1/nowhere") != std::string::npos);

  const auto method = ask(server.endpoint(), "DELETE /hello HTTP/1.1\r\nHost: " + server.host() + "\r\n\r\n");
  REQUIRE(method);
  CHECK(method->status == 405);
  CHECK(method->header("Allow") == "GET, HEAD");
  const auto invented =
      ask(server.endpoint(), "WEIGH /hello HTTP/1.1\r\nHost: " + server.host() + "\r\n\r\n");
  REQUIRE(invented);
  CHECK(invented->status == 405);
}

TEST_CASE("a handler's bug is a 500 that says nothing of the inside, and is reported") {
  LiveServer server;
  RawClient client(server.endpoint());
  REQUIRE(client.send(get_request(server, "/throws") + get_request(server, "/injects") +
                      get_request(server, "/hello")));
  const auto thrown = client.read_answer();
  const auto injected = client.read_answer();
  const auto fine = client.read_answer();
  REQUIRE((thrown && injected && fine));
  CHECK(thrown->status == 500);
  CHECK(thrown->header("Content-Type") == "application/problem+json");
  CHECK((thrown->head + thrown->body).find("secret") == std::string::npos);
  CHECK(injected->status == 500);
  CHECK(injected->header("Set-Cookie").empty());
  CHECK(fine->status == 200);
  const auto reports = server.reports();
  REQUIRE(reports.size() == 2);
  CHECK(reports[0] == "GET /throws failed: secret of the inside");
}

TEST_CASE("problem documents of an Error carry its members (RFC 9457)") {
  const Response response = problem(409, {ErrorKind::conflict, "row 3, column close",
                                          "differs from what is stored", "12\xFF", "send a revision"});
  CHECK(response.status == 409);
  const auto document = nlohmann::json::parse(response.body);
  CHECK(document["title"] == "Conflict");
  CHECK(document["kind"] == "conflict");
  CHECK(document["place"] == "row 3, column close");
  CHECK(document["remedy"] == "send a revision");
  CHECK(nlohmann::json::parse(problem(503, "Wait", "a moment").body)["title"] == "Wait");
}

TEST_CASE("entity tags answer 304 to a client that has the body already") {
  LiveServer server;
  const auto first = ask(server.endpoint(), get_request(server, "/tagged"));
  REQUIRE(first);
  CHECK(first->header("ETag") == "\"abc123\"");
  CHECK(first->header("Cache-Control") == "no-cache");
  for (const std::string sent : {"\"abc123\"", "\"x\", W/\"abc123\"", "*"}) {
    RawClient client(server.endpoint());
    REQUIRE(client.send(get_request(server, "/tagged", "If-None-Match: " + sent + "\r\n") +
                        get_request(server, "/hello")));
    const auto answer = client.read_answer();
    REQUIRE(answer);
    CHECK(answer->status == 304);
    CHECK(answer->header("ETag") == "\"abc123\"");
    CHECK(answer->header("Content-Length").empty());
    const auto next = client.read_answer();
    REQUIRE(next);
    CHECK(next->status == 200);
  }
  const auto other =
      ask(server.endpoint(), get_request(server, "/tagged", "If-None-Match: \"abc\", \"abc1234\"\r\n"));
  REQUIRE(other);
  CHECK(other->status == 200);
  // FNV-1a of "foobar" is 85944171f73967e8 (test vectors of RFC 9923 and of the authors' page, from memory).
  Response plain;
  plain.body = "foobar";
  CHECK(with_entity_tag(Request{}, plain).headers["ETag"] == "\"85944171f73967e8-6\"");
}

TEST_CASE("a Unix-domain socket serves in the same way") {
  const auto folder =
      std::filesystem::temp_directory_path() / ("nightweigh_http_" + std::to_string(::getpid()));
  std::filesystem::create_directories(folder);
  const auto path = folder / "http.sock";
  const auto settings_at = [&] {
    ServerSettings settings;
    settings.path = path;
    return settings;
  };
  {
    LiveServer server(settings_at());
    CHECK(server.endpoint() == "unix:" + path.string());
    for (const std::string host : {"localhost", ""}) {
      const auto answer = ask(server.endpoint(), "GET /hello HTTP/1.1\r\nHost: " + host + "\r\n\r\n");
      REQUIRE(answer);
      CHECK(answer->status == 200);
    }
    const auto foreign = ask(server.endpoint(), "GET /hello HTTP/1.1\r\nHost: example.org\r\n\r\n");
    REQUIRE(foreign);
    CHECK(foreign->status == 421);

    boost::asio::io_context io;
    const auto second = Server::open(io, settings_at(), sample_handler());
    REQUIRE_FALSE(second);
    CHECK(second.error().kind == ErrorKind::busy);
    CHECK(second.error().message().find(path.string()) != std::string::npos);
    CHECK(std::filesystem::exists(path));
  }
  CHECK_FALSE(std::filesystem::exists(path));

  {  // left behind by a process that died: nobody listens
    sockaddr_un address{};
    address.sun_family = AF_UNIX;
    path.string().copy(address.sun_path, sizeof(address.sun_path) - 1);
    const int dead = ::socket(AF_UNIX, SOCK_STREAM, 0);
    REQUIRE(::bind(dead, reinterpret_cast<const sockaddr*>(&address), sizeof(address)) == 0);
    ::close(dead);
    LiveServer server(settings_at());
    const auto answer = ask(server.endpoint(), "GET /hello HTTP/1.1\r\nHost: localhost\r\n\r\n");
    REQUIRE(answer);
    CHECK(answer->status == 200);
  }
  {  // somebody's file
    std::ofstream(path) << "precious";
    boost::asio::io_context io;
    const auto refused = Server::open(io, settings_at(), sample_handler());
    REQUIRE_FALSE(refused);
    CHECK(refused.error().problem.find("no socket") != std::string::npos);
    CHECK(std::filesystem::file_size(path) == 8);
  }
  {  // sockaddr_un holds 107 bytes of path
    ServerSettings settings;
    settings.path = folder / std::string(120, 'l');
    boost::asio::io_context io;
    const auto refused = Server::open(io, settings, sample_handler());
    REQUIRE_FALSE(refused);
    CHECK(refused.error().kind == ErrorKind::bad_settings);
  }
  std::filesystem::remove_all(folder);
}

TEST_CASE("opening: an address in use, an address that others can reach, no address") {
  LiveServer server;
  boost::asio::io_context io;
  ServerSettings settings;
  settings.address = "127.0.0.1";
  settings.port = server.port();
  const auto in_use = Server::open(io, settings, sample_handler());
  REQUIRE_FALSE(in_use);
  CHECK(in_use.error().kind == ErrorKind::busy);
  CHECK(in_use.error().message().find(server.endpoint()) != std::string::npos);
  for (const std::string address : {"0.0.0.0", "192.0.2.1", "::", "example.org"}) {
    settings.address = address;
    const auto refused = Server::open(io, settings, sample_handler());
    REQUIRE_FALSE(refused);
    CHECK(refused.error().kind == ErrorKind::bad_settings);
  }
  CHECK_FALSE(Server::open(io, ServerSettings{}, sample_handler()));
}

#include "daemon/http/request_target.h"

#include <doctest/doctest.h>
#include <rapidcheck.h>

using namespace nightweigh;
using namespace nightweigh::http;

TEST_CASE("targets are split, then decoded") {
  const auto target = parse_request_target("/v1/books/harbour/log.csv?from=2026-01-02&limit=10&note=a%3Db+c");
  REQUIRE(target);
  CHECK(target->path == "/v1/books/harbour/log.csv");
  CHECK(target->segments == std::vector<std::string>{"v1", "books", "harbour", "log.csv"});
  CHECK(target->query ==
        std::map<std::string, std::string>{{"from", "2026-01-02"}, {"limit", "10"}, {"note", "a=b c"}});
  CHECK(target->authority.empty());

  const auto root = parse_request_target("/");
  REQUIRE(root);
  CHECK(root->path == "/");
  CHECK(root->segments.empty());
  const auto closing = parse_request_target("/v1/?");
  REQUIRE(closing);
  CHECK(closing->path == "/v1/");
  CHECK(closing->segments == std::vector<std::string>{"v1", ""});
  const auto absolute = parse_request_target("http://localhost:80?x=1");
  CHECK_FALSE(absolute);  // no path: RFC 9112 lets only OPTIONS have none
  const auto absolute_path = parse_request_target("http://localhost:80/a?x=1");
  REQUIRE(absolute_path);
  CHECK(absolute_path->authority == "localhost:80");
  CHECK(absolute_path->path == "/a");
  // percent signs are decoded once
  const auto twice = parse_request_target("/a/%252e%252e");
  REQUIRE(twice);
  CHECK(twice->segments[1] == "%2e%2e");
}

TEST_CASE("the error names what is wrong, the text and the remedy") {
  const auto twice = parse_request_target("/v1?limit=1&%6cimit=2");
  REQUIRE_FALSE(twice);
  CHECK(twice.error().problem == "has a query key twice");
  CHECK(twice.error().value == "limit");
  const auto escape = parse_request_target("/v1/%4");
  REQUIRE_FALSE(escape);
  CHECK(escape.error().kind == ErrorKind::bad_input);
  CHECK(escape.error().value == "%4");
}

TEST_CASE("RFC 3986 examples of escapes") {
  CHECK(percent_encoded("ALDER") == "ALDER");
  CHECK(percent_encoded("a b/c?d=%") == "a%20b%2Fc%3Fd%3D%25");
  CHECK(percent_encoded("\xE3\x82\xA2") == "%E3%82%A2");  // katakana A, RFC 3986 section 2.5
}

TEST_CASE("properties") {
  CHECK(rc::check("what was encoded is decoded to itself", [] {
    std::string text;
    for (const int c : *rc::gen::container<std::vector<int>>(rc::gen::inRange(0x20, 0x7F)))
      if (c != '/') text += static_cast<char>(c);
    RC_PRE(!text.empty() && text != "." && text != "..");
    const auto target = parse_request_target("/x/" + percent_encoded(text) + "?k=" + percent_encoded(text));
    RC_ASSERT(target.has_value());
    RC_ASSERT(target->segments.at(1) == text);
    RC_ASSERT(target->query.at("k") == text);
  }));
  CHECK(rc::check("any bytes are read or refused", [](const std::vector<char>& bytes) {
    const auto target = parse_request_target("/" + std::string(bytes.begin(), bytes.end()));
    if (target)
      for (const std::string& segment : target->segments) {
        RC_ASSERT(segment != "..");
        RC_ASSERT(segment.find('\0') == std::string::npos);
      }
  }));
}

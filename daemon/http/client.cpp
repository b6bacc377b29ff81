#include "daemon/http/client.h"

#include <sys/un.h>

#include <boost/asio/generic/stream_protocol.hpp>
#include <boost/asio/io_context.hpp>
#include <boost/asio/ip/tcp.hpp>
#include <boost/asio/local/stream_protocol.hpp>
#include <boost/beast/core/basic_stream.hpp>
#include <boost/beast/core/flat_buffer.hpp>
#include <boost/beast/http/empty_body.hpp>
#include <boost/beast/http/parser.hpp>
#include <boost/beast/http/read.hpp>
#include <boost/beast/http/string_body.hpp>
#include <boost/beast/http/write.hpp>
#include <charconv>
#include <optional>
#include <utility>

namespace nightweigh::http {

namespace {

namespace net = boost::asio;
namespace beast = boost::beast;
namespace bhttp = boost::beast::http;
using boost::system::error_code;
using net::generic::stream_protocol;

constexpr std::size_t answer_bytes_max = 256u << 20;
constexpr std::uint32_t header_bytes_max = 64u << 10;

struct Destination {
  stream_protocol::endpoint endpoint;
  std::string host;  // of the Host header
};

Error bad_endpoint(const std::string& text) {
  return {ErrorKind::bad_settings, "http endpoint", "is neither address:port nor unix:/path", shown(text),
          "write it like 127.0.0.1:8420, [::1]:8420 or unix:/run/nightweigh/http.sock"};
}

Result<Destination> destination_of(const std::string& text) {
  constexpr std::string_view unix_prefix = "unix:";
  if (text.starts_with(unix_prefix)) {
    const std::string path = text.substr(unix_prefix.size());
    if (path.empty() || path.size() >= sizeof(sockaddr_un{}.sun_path) || path.find('\0') != std::string::npos)
      return failure(bad_endpoint(text));
    return Destination{net::local::stream_protocol::endpoint(path), "localhost"};
  }
  const std::size_t colon = text.rfind(':');
  if (colon == std::string::npos) return failure(bad_endpoint(text));
  std::uint16_t port = 0;
  const char* const end = text.data() + text.size();
  const auto read = std::from_chars(text.data() + colon + 1, end, port);
  if (read.ec != std::errc() || read.ptr != end || port == 0) return failure(bad_endpoint(text));
  std::string host = text.substr(0, colon);
  if (host.size() > 2 && host.front() == '[' && host.back() == ']') host = host.substr(1, host.size() - 2);
  error_code error;
  const net::ip::address address = net::ip::make_address(host == "localhost" ? "127.0.0.1" : host, error);
  // An IPv6 address needs its brackets, or its last group would be read as the port.
  if (error || address.is_v6() != (text.front() == '[')) return failure(bad_endpoint(text));
  return Destination{net::ip::tcp::endpoint(address, port), text};
}

// What an error of the system or of Beast means for the person at the command line.
Error explained(const std::string& endpoint, const error_code& error, std::chrono::seconds time_out) {
  const std::string place = "service at " + endpoint;
  const std::string start = "start the service with nightweigh serve --settings FILE";
  if (error == net::error::connection_refused || error == boost::system::errc::no_such_file_or_directory)
    return {ErrorKind::not_found, place, "nobody listens there", "", start};
  if (error == boost::system::errc::permission_denied)
    return {ErrorKind::storage, place, "this user may not open it", "",
            "run the command as a user of its group"};
  if (error == beast::error::timeout)
    return {ErrorKind::busy, place, "has not answered within " + std::to_string(time_out.count()) + " s", "",
            "try again, and look at its log"};
  if (error == bhttp::error::body_limit || error == bhttp::error::header_limit)
    return {ErrorKind::limit, place,
            "its answer is longer than " + std::to_string(answer_bytes_max) + " bytes", "",
            "ask for less, with a limit or a range of dates"};
  if (error.category() == bhttp::make_error_code(bhttp::error::bad_method).category() &&
      error != bhttp::error::end_of_stream && error != bhttp::error::partial_message)
    return {ErrorKind::corrupted, place, "its answer is no HTTP/1.1", shown(error.message()),
            "look whether another program listens there"};
  return {ErrorKind::busy, place, "the connection broke", shown(error.message()),
          "try again, and look at its log"};
}

}  // namespace

Result<Answer> get(const std::string& endpoint, const std::string& target, std::chrono::seconds time_out) {
  const Result<Destination> destination = destination_of(endpoint);
  if (!destination) return failure(destination.error());
  for (const char c : target)
    if (c <= 0x20 || c >= 0x7F)
      return failure({ErrorKind::bad_input, "request target", "has a character that it cannot hold",
                      shown(target), "percent-encode it"});
  if (!target.starts_with('/'))
    return failure({ErrorKind::bad_input, "request target", "does not start with a slash", shown(target),
                    "write a path like /v1/books"});

  net::io_context io;
  beast::basic_stream<stream_protocol> stream(io);
  // One deadline for connecting, asking and reading: basic_stream enforces it on asynchronous operations
  // only, so each is run to its end here.
  stream.expires_after(time_out);
  error_code failed;
  const auto done = [&failed](const error_code& error, std::size_t = 0) { failed = error; };
  const auto run = [&io] {
    io.run();
    io.restart();
  };

  stream.async_connect(destination->endpoint, [&done](const error_code& error) { done(error); });
  run();
  if (failed) return failure(explained(endpoint, failed, time_out));

  bhttp::request<bhttp::empty_body> request(bhttp::verb::get, target, 11);
  request.set(bhttp::field::host, destination->host);
  request.set(bhttp::field::user_agent, "nightweigh");
  request.set(bhttp::field::accept, "*/*");
  request.keep_alive(false);
  bhttp::async_write(stream, request, done);
  run();
  // A server that refuses early may have closed its side already; its answer is still to be read.
  const error_code write_failed = failed;

  beast::flat_buffer buffer;
  bhttp::response_parser<bhttp::string_body> parser;
  parser.header_limit(header_bytes_max);
  parser.body_limit(answer_bytes_max);
  // In two steps: this Boost's parser forgets that the length is beyond the limit when it reads on at once.
  bhttp::async_read_header(stream, buffer, parser, done);
  run();
  if (!failed && !parser.is_done()) {
    bhttp::async_read(stream, buffer, parser, done);
    run();
  }
  if (failed) return failure(explained(endpoint, write_failed ? write_failed : failed, time_out));

  Answer answer;
  answer.status = static_cast<int>(parser.get().result_int());
  const beast::string_view type = parser.get()[bhttp::field::content_type];
  answer.content_type.assign(type.data(), type.size());
  answer.body = std::move(parser.get().body());
  return answer;
}

}  // namespace nightweigh::http

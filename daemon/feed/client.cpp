#include "daemon/feed/client.h"

#include <boost/asio/buffer.hpp>
#include <boost/asio/connect.hpp>
#include <boost/asio/generic/stream_protocol.hpp>
#include <boost/asio/io_context.hpp>
#include <boost/asio/ip/tcp.hpp>
#include <boost/asio/local/stream_protocol.hpp>
#include <boost/asio/read_until.hpp>
#include <boost/asio/write.hpp>
#include <charconv>
#include <cstdint>
#include <optional>

namespace nightweigh::feed {

namespace {

namespace asio = boost::asio;
using boost::system::error_code;
using Protocol = asio::generic::stream_protocol;

constexpr std::string_view unix_prefix = "unix:";
constexpr std::string_view running_remedy =
    "Start the service with `nightweigh serve`, or correct feed_socket in the settings; endpoints.json in "
    "the data "
    "folder names the address in use";

Result<Protocol::endpoint> parse_endpoint(const std::string& text) {
  Error error{ErrorKind::bad_input, "feed endpoint", "is not an address of the feed socket", shown(text),
              "Write it like 127.0.0.1:8421, [::1]:8421 or unix:/run/nightweigh/feed.sock"};
  if (text.substr(0, unix_prefix.size()) == unix_prefix) {
    const std::string path = text.substr(unix_prefix.size());
    // sun_path of sockaddr_un holds 108 bytes with the closing NUL.
    if (path.empty() || path.size() > 107 || path.find('\0') != std::string::npos)
      return failure(std::move(error));
    return Protocol::endpoint(asio::local::stream_protocol::endpoint(path));
  }
  const std::size_t colon = text.rfind(':');
  if (colon == std::string::npos) return failure(std::move(error));
  std::string host = text.substr(0, colon);
  const bool bracketed = host.size() > 2 && host.front() == '[' && host.back() == ']';
  if (bracketed) host = host.substr(1, host.size() - 2);
  std::uint16_t port = 0;
  const char* const end = text.data() + text.size();
  const auto read = std::from_chars(text.data() + colon + 1, end, port);
  error_code ec;
  const asio::ip::address address = asio::ip::make_address(host, ec);
  if (ec || address.is_v6() != bracketed || read.ec != std::errc() || read.ptr != end || port == 0) {
    return failure(std::move(error));
  }
  return Protocol::endpoint(asio::ip::tcp::endpoint(address, port));
}

}  // namespace

Result<std::string> send_line(const std::string& endpoint, std::string_view line,
                              const ClientLimits& limits) {
  const auto address = parse_endpoint(endpoint);
  if (!address) return failure(address.error());
  if (line.empty() || line.find('\n') != std::string_view::npos) {
    return failure({ErrorKind::bad_input, "feed line", line.empty() ? "is empty" : "holds a line break", "",
                    "Send one batch as one line of JSON"});
  }
  const std::string place = "feed socket " + shown(endpoint);

  asio::io_context io;
  Protocol::socket socket(io);
  std::optional<error_code> connected;
  socket.async_connect(*address, [&](error_code ec) { connected = ec; });
  io.run_for(limits.connect);
  if (!connected) {
    socket.close();
    io.run();
    return failure(
        {ErrorKind::busy, place, "does not take the connection", "", "See whether the service is stuck"});
  }
  if (*connected) {
    const bool not_allowed = *connected == asio::error::access_denied;
    return failure({not_allowed ? ErrorKind::storage : ErrorKind::not_found, place,
                    not_allowed ? "may not be used by this user" : "nobody listens there",
                    connected->message(),
                    not_allowed ? "Run the command as the service's user" : std::string(running_remedy)});
  }

  // The answer is read while the line is still being written: a refusal (a line that is too long) may come
  // before its end, and the write may then fail without harm.
  std::string sent;
  sent.reserve(line.size() + 1);
  sent.append(line).push_back('\n');
  std::string answer;
  std::optional<error_code> answered;
  std::size_t answer_size = 0;
  asio::async_write(socket, asio::buffer(sent), [](error_code, std::size_t) {});
  asio::async_read_until(socket, asio::dynamic_buffer(answer, limits.answer_bytes_max), '\n',
                         [&](error_code ec, std::size_t size) {
                           answered = ec;
                           answer_size = size;
                           error_code ignored;
                           socket.close(ignored);
                         });
  io.restart();
  io.run_for(limits.answer);
  if (!answered) {
    socket.close();
    io.run();
    return failure({ErrorKind::busy, place,
                    "gave no answer within " + std::to_string(limits.answer.count() / 1000) + " s", "",
                    "Send the batch again later: one that was taken is answered as known"});
  }
  if (*answered) {
    if (*answered == asio::error::not_found) {
      return failure(
          {ErrorKind::limit, place,
           "answered with a line of more than " + std::to_string(limits.answer_bytes_max) + " bytes", "",
           "See the service's log"});
    }
    return failure({ErrorKind::storage, place, "the connection broke before the answer", answered->message(),
                    "Send the batch again: one that was taken is answered as known"});
  }
  answer.resize(answer_size - 1);
  if (!answer.empty() && answer.back() == '\r') answer.pop_back();
  return answer;
}

}  // namespace nightweigh::feed

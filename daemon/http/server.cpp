#include "daemon/http/server.h"

#include <sys/socket.h>
#include <sys/stat.h>
#include <sys/un.h>
#include <unistd.h>

#include <algorithm>
#include <array>
#include <atomic>
#include <boost/asio/basic_socket_acceptor.hpp>
#include <boost/asio/basic_stream_socket.hpp>
#include <boost/asio/co_spawn.hpp>
#include <boost/asio/detached.hpp>
#include <boost/asio/generic/stream_protocol.hpp>
#include <boost/asio/ip/tcp.hpp>
#include <boost/asio/local/stream_protocol.hpp>
#include <boost/asio/post.hpp>
#include <boost/asio/redirect_error.hpp>
#include <boost/asio/steady_timer.hpp>
#include <boost/asio/use_awaitable.hpp>
#include <boost/asio/write.hpp>
#include <boost/beast/core/basic_stream.hpp>
#include <boost/beast/core/flat_buffer.hpp>
#include <boost/beast/http/empty_body.hpp>
#include <boost/beast/http/message.hpp>
#include <boost/beast/http/parser.hpp>
#include <boost/beast/http/read.hpp>
#include <boost/beast/http/string_body.hpp>
#include <boost/beast/http/write.hpp>
#include <cstring>
#include <ctime>
#include <exception>
#include <list>
#include <optional>
#include <sstream>
#include <string_view>

#include "daemon/http/host_list.h"
#include "daemon/http/request_target.h"

namespace nightweigh::http {

namespace {

namespace net = boost::asio;
namespace beast = boost::beast;
namespace bhttp = boost::beast::http;
using boost::system::error_code;
using net::generic::stream_protocol;
// TCP and Unix-domain sockets alike.
using Socket = net::basic_stream_socket<stream_protocol>;
using Acceptor = net::basic_socket_acceptor<stream_protocol>;
using Stream = beast::basic_stream<stream_protocol>;
using Parser = bhttp::request_parser<bhttp::string_body>;

constexpr std::size_t piece_bytes = 256u << 10;       // write_s is for so much of an answer
constexpr std::size_t farewell_bytes_max = 4u << 20;  // of a refused request, read to let the refusal arrive
constexpr std::chrono::seconds farewell_s{2};         // and for so long at most
constexpr std::size_t refused_at_once_max = 16;       // connections over the bound being told so
constexpr std::chrono::milliseconds accept_pause_ms{100};  // after the system refused to accept

// ---- answers as bytes

// An RFC 9110 (5.6.7) date: "Sun, 06 Nov 1994 08:49:37 GMT".
std::string http_date(std::chrono::system_clock::time_point at) {
  constexpr std::array<const char*, 7> days = {"Sun", "Mon", "Tue", "Wed", "Thu", "Fri", "Sat"};
  constexpr std::array<const char*, 12> months = {"Jan", "Feb", "Mar", "Apr", "May", "Jun",
                                                  "Jul", "Aug", "Sep", "Oct", "Nov", "Dec"};
  const std::time_t seconds = std::chrono::system_clock::to_time_t(at);
  std::tm utc{};
  gmtime_r(&seconds, &utc);
  std::array<char, 64> text{};
  std::snprintf(text.data(), text.size(), "%s, %02d %s %04d %02d:%02d:%02d GMT",
                days[static_cast<std::size_t>(utc.tm_wday)], utc.tm_mday,
                months[static_cast<std::size_t>(utc.tm_mon)], utc.tm_year + 1900, utc.tm_hour, utc.tm_min,
                utc.tm_sec);
  return text.data();
}

bool is_header_name(const std::string& name) {
  constexpr std::string_view others = "!#$%&'*+-.^_`|~";
  return !name.empty() && std::all_of(name.begin(), name.end(), [&](char c) {
    return (c >= '0' && c <= '9') || (c >= 'a' && c <= 'z') || (c >= 'A' && c <= 'Z') ||
           others.find(c) != std::string_view::npos;
  });
}

bool is_header_value(const std::string& value) {
  return std::all_of(value.begin(), value.end(), [](char c) {
    const auto byte = static_cast<unsigned char>(c);
    return byte == '\t' || (byte >= 0x20 && byte != 0x7F);
  });
}

// The framing of an answer is this file's business.
bool is_ours_to_set(const std::string& name) {
  return beast::iequals(name, "Content-Length") || beast::iequals(name, "Transfer-Encoding") ||
         beast::iequals(name, "Connection");
}

// An answer that is not is a bug of ours, and becomes a 500.
bool is_well_formed(const Response& response) {
  return response.status >= 200 && response.status <= 599 && is_header_value(response.content_type) &&
         std::all_of(response.headers.begin(), response.headers.end(), [](const auto& header) {
           return is_header_name(header.first) && is_header_value(header.second) &&
                  !is_ours_to_set(header.first);
         });
}

struct Framing {
  unsigned version = 11;
  bool keep_alive = false;
  bool without_body = false;  // the answer to HEAD
};

std::string head_of(const Response& response, const Framing& framing) {
  bhttp::response<bhttp::empty_body> message;
  message.version(framing.version);
  message.result(static_cast<unsigned>(response.status));
  const bool has_content = response.status != 204 && response.status != 304;
  if (has_content) message.set(bhttp::field::content_type, response.content_type);
  message.set(bhttp::field::cache_control, "no-store");
  for (const auto& [name, value] : response.headers) message.set(name, value);
  message.set("X-Content-Type-Options", "nosniff");
  message.set(bhttp::field::server, "nightweigh");
  message.set(bhttp::field::date, http_date(std::chrono::system_clock::now()));
  if (has_content) message.set(bhttp::field::content_length, std::to_string(response.body.size()));
  message.keep_alive(framing.keep_alive);
  std::ostringstream text;
  text << message.base();
  return text.str();
}

// ---- requests

std::string lower(std::string_view text) {
  std::string out(text);
  for (char& c : out)
    if (c >= 'A' && c <= 'Z') c = static_cast<char>(c - 'A' + 'a');
  return out;
}

std::string text_of(beast::string_view text) {
  return {text.data(), text.size()};
}

std::map<std::string, std::string> headers_of(const Parser::value_type& message) {
  std::map<std::string, std::string> headers;
  for (const auto& field : message) {
    const std::string name = lower(text_of(field.name_string()));
    const auto [at, is_new] = headers.emplace(name, text_of(field.value()));
    if (!is_new) at->second += ", " + text_of(field.value());
  }
  return headers;
}

Response framing_problem(const std::string& detail) {
  return problem(400, "", detail);
}

// Everything that the headers alone decide, before a byte of body is read. nullopt: go on.
//
// 1. A body has one length that every reader agrees on: one Content-Length, or `chunked` alone.
// 2. The request is meant for this server: one Host (and an absolute target) on the list.
// 3. It does not come from somebody else's page: no foreign Origin.
std::optional<Response> refusal(const Parser::value_type& message, const HostList& hosts) {
  using bhttp::field;
  for (const field name : {field::host, field::content_length, field::transfer_encoding, field::origin,
                           field::authorization, field::content_type, field::expect})
    if (message.count(name) > 1)
      return framing_problem("the header " + text_of(bhttp::to_string(name)) + " stands more than once");

  const bool has_encoding = message.count(field::transfer_encoding) > 0;
  if (has_encoding && message.count(field::content_length) > 0)
    return framing_problem("Content-Length and Transfer-Encoding stand together");
  if (message.count(field::content_length) > 0) {
    const beast::string_view length = message[field::content_length];
    if (!std::all_of(length.begin(), length.end(), [](char c) { return c >= '0' && c <= '9'; }))
      return framing_problem("Content-Length is not one number");
  }
  if (has_encoding) {
    if (message.version() < 11) return framing_problem("HTTP/1.0 has no Transfer-Encoding");
    if (!beast::iequals(message[field::transfer_encoding], "chunked"))
      return problem(501, "", "the only transfer encoding that is understood is chunked");
  }

  if (message.count(field::host) == 0) return framing_problem("the Host header is missing");
  if (!hosts.has_host(text_of(message[field::host])))
    return problem(421, "",
                   "this server does not answer for the host \"" + shown(text_of(message[field::host])) +
                       "\". Ask for it by its own address, or as localhost, with its port");
  if (message.count(field::origin) > 0 && !hosts.has_origin(text_of(message[field::origin])))
    return problem(
        403, "",
        "requests from pages of \"" + shown(text_of(message[field::origin])) + "\" are not answered");

  if (message.method() == bhttp::verb::connect || message.method() == bhttp::verb::trace)
    return problem(501, "", text_of(message.method_string()) + " is not supported");
  if (message.count(field::expect) > 0 && !beast::iequals(message[field::expect], "100-continue"))
    return problem(417, "", "the only expectation that is understood is 100-continue");
  return std::nullopt;
}

// Reads the rest of a request's meaning; an answer is the refusal.
tl::expected<Request, Response> request_of(const Parser::value_type& message, const HostList& hosts) {
  Result<RequestTarget> target = parse_request_target({message.target().data(), message.target().size()});
  if (!target) return tl::unexpected<Response>(problem(400, target.error()));
  if (!target->authority.empty() && !hosts.has_host(target->authority))
    return tl::unexpected<Response>(
        problem(421, "", "this server does not answer for the host \"" + shown(target->authority) + "\""));
  Request request;
  request.method = message.method() == bhttp::verb::head ? "GET" : text_of(message.method_string());
  request.path = std::move(target->path);
  request.segments = std::move(target->segments);
  request.query = std::move(target->query);
  request.headers = headers_of(message);
  return request;
}

// The refusal of what the parser could not read; nullopt where the peer left or was too slow.
std::optional<Response> refusal_of(const error_code& error, const ServerSettings& settings) {
  if (error == bhttp::error::header_limit || error == bhttp::error::buffer_overflow)
    return problem(431, "",
                   "request line and headers together are longer than " +
                       std::to_string(settings.header_bytes_max) + " bytes");
  if (error == bhttp::error::body_limit)
    return problem(413, "", "the body is longer than " + std::to_string(settings.body_bytes_max) + " bytes");
  if (error == bhttp::error::end_of_stream || error == bhttp::error::partial_message) return std::nullopt;
  if (error.category() == bhttp::make_error_code(bhttp::error::bad_method).category())
    return framing_problem("this is no HTTP/1.1 request: " + error.message());
  return std::nullopt;
}

// ---- the socket file of a Unix-domain server

// Removes its file when it goes, unless somebody else's stands there by then.
class SocketFile {
 public:
  SocketFile() = default;
  SocketFile(const SocketFile&) = delete;
  SocketFile& operator=(const SocketFile&) = delete;
  ~SocketFile() { remove(); }

  void own(const std::filesystem::path& path) {
    struct stat found {};
    if (::lstat(path.c_str(), &found) != 0) return;
    path_ = path;
    device_ = found.st_dev;
    inode_ = found.st_ino;
  }
  void remove() {
    struct stat found {};
    if (!path_.empty() && ::lstat(path_.c_str(), &found) == 0 && found.st_dev == device_ &&
        found.st_ino == inode_)
      ::unlink(path_.c_str());
    path_.clear();
  }

 private:
  std::filesystem::path path_;
  dev_t device_ = 0;
  ino_t inode_ = 0;
};

Error cannot_listen(const std::string& endpoint, const std::string& why, std::string remedy,
                    ErrorKind kind = ErrorKind::storage) {
  return {kind, "http " + endpoint, "cannot listen here: " + why, "", std::move(remedy)};
}

// Makes way for a socket at `path`: nothing there, or a socket that nobody listens on.
std::optional<Error> clear_stale_socket(net::io_context& io, const std::filesystem::path& path) {
  const std::string endpoint = "unix:" + path.string();
  if (path.string().size() >= sizeof(sockaddr_un{}.sun_path))
    return cannot_listen(endpoint, "the path is longer than a socket address can hold",
                         "choose a shorter path", ErrorKind::bad_settings);
  struct stat found {};
  if (::lstat(path.c_str(), &found) != 0) return std::nullopt;
  if (!S_ISSOCK(found.st_mode))
    return cannot_listen(endpoint, "a file that is no socket stands there",
                         "remove it, or choose another path", ErrorKind::bad_settings);
  net::local::stream_protocol::socket probe(io);
  error_code error;
  probe.connect(net::local::stream_protocol::endpoint(path.string()), error);
  if (!error)
    return cannot_listen(endpoint, "another process listens on it", "stop that one, or choose another path",
                         ErrorKind::busy);
  if (error != net::error::connection_refused)
    return cannot_listen(endpoint, error.message(), "look at the permissions of the path");
  ::unlink(path.c_str());
  return std::nullopt;
}

// ---- connections

struct Connection {
  Connection(Socket socket, bool over) : stream(std::move(socket)), is_over(over) {}
  Stream stream;
  const bool is_over;         // beyond connections_max: it is told so and closed
  bool interruptible = true;  // no whole request is in hand: stop() may cancel it
};

// What the server and its coroutines share. Touched by the io_context's thread only, but for `stopped`.
//
// Invariants:
// 1. A connection is in `open` exactly while its coroutine runs.
// 2. After stop_now() no connection begins to read a request, and each has been cancelled or will close
//    after its answer.
// 3. `stopped` is true exactly when stop_now() has run and neither acceptor nor connections are left.
class Core : public std::enable_shared_from_this<Core> {
 public:
  Core(net::io_context& io, ServerSettings settings, Handler handler)
      : settings_(std::move(settings)),
        handler_(std::move(handler)),
        acceptor_(io),
        pause_(io),
        stop_timer_(io) {}

  std::optional<Error> listen(net::io_context& io);
  void start();
  void stop_now();
  bool stopped() const { return stopped_; }
  const std::string& endpoint() const { return endpoint_; }

 private:
  using Place = std::list<Connection>::iterator;

  net::awaitable<void> accept_all();
  net::awaitable<void> serve(Place place);
  net::awaitable<void> refuse_connection(Place place);
  // Reads one request into `request` or an answer into `response`. False: the connection is over.
  net::awaitable<bool> read_request(Connection& connection, beast::flat_buffer& buffer, bool is_first,
                                    std::optional<Request>& request, Response& response, Framing& framing);
  net::awaitable<Response> handle(const Request& request);
  // False: the peer is gone or too slow.
  net::awaitable<bool> write(Connection& connection, const Response& response, Framing framing);
  net::awaitable<void> farewell(Connection& connection);

  void report(const std::string& text) const {
    if (settings_.report) settings_.report(text);
  }
  void left(Place place);
  void look_whether_stopped();

  ServerSettings settings_;
  Handler handler_;
  HostList hosts_;
  std::string endpoint_;
  SocketFile socket_file_;
  Acceptor acceptor_;
  net::steady_timer pause_;       // of the acceptor
  net::steady_timer stop_timer_;  // cuts what is left after stop_s
  std::list<Connection> open_;
  std::size_t served_ = 0;  // those of open_ that are not over the bound
  bool accepting_ = false;
  bool stopping_ = false;
  std::atomic<bool> stopped_{false};
};

std::optional<Error> Core::listen(net::io_context& io) {
  const bool is_unix = settings_.address.empty();
  stream_protocol::endpoint where;
  std::string asked;
  if (is_unix) {
    asked = "unix:" + settings_.path.string();
    if (settings_.path.empty())
      return cannot_listen(asked, "neither an address nor a path is given", "give one",
                           ErrorKind::bad_settings);
    if (std::optional<Error> error = clear_stale_socket(io, settings_.path)) return error;
    where = net::local::stream_protocol::endpoint(settings_.path.string());
  } else {
    asked = settings_.address + ":" + std::to_string(settings_.port);
    error_code error;
    const net::ip::address address = net::ip::make_address(settings_.address, error);
    if (error || !address.is_loopback())
      return cannot_listen(asked, "this is no loopback address", "use 127.0.0.1, ::1 or a Unix-domain socket",
                           ErrorKind::bad_settings);
    where = net::ip::tcp::endpoint(address, settings_.port);
  }

  error_code error;
  acceptor_.open(where.protocol(), error);
  if (!error && !is_unix) acceptor_.set_option(net::socket_base::reuse_address(true), error);
  if (!error) acceptor_.bind(where, error);
  if (error == net::error::address_in_use)
    return cannot_listen(asked, "the address is in use", "stop what listens there, or choose another port",
                         ErrorKind::busy);
  if (!error && is_unix) {
    socket_file_.own(settings_.path);
    // Before anybody can connect: the user and the group of the service, nobody else.
    if (::chmod(settings_.path.c_str(), 0660) != 0) error.assign(errno, boost::system::system_category());
  }
  if (!error) acceptor_.listen(net::socket_base::max_listen_connections, error);
  if (!error) where = acceptor_.local_endpoint(error);
  if (error) return cannot_listen(asked, error.message(), "choose another endpoint");

  if (is_unix) {
    endpoint_ = asked;
    hosts_ = HostList::for_unix_socket();
    return std::nullopt;
  }
  net::ip::tcp::endpoint bound;
  std::memcpy(bound.data(), where.data(), where.size());
  const std::string address = bound.address().to_string();
  endpoint_ = (bound.address().is_v6() ? "[" + address + "]" : address) + ":" + std::to_string(bound.port());
  hosts_ = HostList::for_tcp(address, bound.port());
  return std::nullopt;
}

void Core::start() {
  accepting_ = true;
  net::co_spawn(
      acceptor_.get_executor(), [self = shared_from_this()] { return self->accept_all(); },
      [self = shared_from_this()](const std::exception_ptr&) {
        self->accepting_ = false;
        self->look_whether_stopped();
      });
}

net::awaitable<void> Core::accept_all() {
  bool reported = false;
  while (!stopping_) {
    error_code error;
    Socket socket = co_await acceptor_.async_accept(net::redirect_error(net::use_awaitable, error));
    if (stopping_) break;
    if (error == net::error::connection_aborted) continue;  // the peer left before it was accepted
    if (error) {
      // Out of descriptors or memory: the connection stays in the kernel's queue and would be offered
      // again at once, so wait for others to end instead of turning in circles.
      if (!reported) report("cannot accept a connection: " + error.message() + "; trying again");
      reported = true;
      pause_.expires_after(accept_pause_ms);
      co_await pause_.async_wait(net::redirect_error(net::use_awaitable, error));
      continue;
    }
    reported = false;
    if (!settings_.address.empty()) socket.set_option(net::ip::tcp::no_delay(true), error);
    const bool is_over = served_ >= settings_.connections_max;
    if (is_over && open_.size() - served_ >= refused_at_once_max) continue;  // closes it without a word
    const Place place = open_.emplace(open_.end(), std::move(socket), is_over);
    if (!is_over) ++served_;
    net::co_spawn(
        acceptor_.get_executor(),
        [self = shared_from_this(), place] {
          return place->is_over ? self->refuse_connection(place) : self->serve(place);
        },
        [self = shared_from_this(), place](const std::exception_ptr& exception) {
          self->left(place);
          if (!exception) return;
          try {
            std::rethrow_exception(exception);
          } catch (const std::exception& what) {
            self->report(std::string("a connection ended by an exception: ") + what.what());
          } catch (...) {
            self->report("a connection ended by an unknown exception");
          }
        });
  }
  error_code ignored;
  acceptor_.close(ignored);
  socket_file_.remove();
}

void Core::left(Place place) {
  if (!place->is_over) --served_;
  open_.erase(place);
  look_whether_stopped();
}

void Core::look_whether_stopped() {
  if (!stopping_ || accepting_ || !open_.empty()) return;
  stop_timer_.cancel();
  stopped_ = true;
}

void Core::stop_now() {
  if (stopping_) return;
  stopping_ = true;
  error_code ignored;
  acceptor_.close(ignored);
  socket_file_.remove();
  pause_.cancel();
  for (Connection& connection : open_)
    if (connection.interruptible) connection.stream.cancel();
  stop_timer_.expires_after(settings_.stop_s);
  stop_timer_.async_wait([self = shared_from_this()](const error_code& error) {
    if (error) return;
    for (Connection& connection : self->open_) connection.stream.close();
  });
  look_whether_stopped();
}

net::awaitable<void> Core::serve(Place place) {
  Connection& connection = *place;
  // Large enough that a header at its limit fits, and that a pipelining client is read in few pieces; it
  // never grows beyond.
  beast::flat_buffer buffer(settings_.header_bytes_max + (64u << 10));
  for (bool is_first = true; !stopping_; is_first = false) {
    std::optional<Request> request;
    Response response;
    Framing framing;
    connection.interruptible = true;
    const bool goes_on = co_await read_request(connection, buffer, is_first, request, response, framing);
    connection.interruptible = false;
    if (!goes_on) co_return;
    if (request) response = co_await handle(*request);
    if (stopping_) framing.keep_alive = false;
    const bool written = co_await write(connection, response, framing);
    if (!written) co_return;
    if (!framing.keep_alive) break;
  }
  co_await farewell(connection);
}

net::awaitable<bool> Core::read_request(Connection& connection, beast::flat_buffer& buffer, bool is_first,
                                        std::optional<Request>& request, Response& response,
                                        Framing& framing) {
  Stream& stream = connection.stream;
  error_code error;
  if (buffer.size() == 0) {
    // Waiting for a request to begin has a time of its own; from its first byte on the other one counts.
    stream.expires_after(is_first ? settings_.read_s : settings_.idle_s);
    const auto space = buffer.prepare(4096);
    const std::size_t count =
        co_await stream.async_read_some(space, net::redirect_error(net::use_awaitable, error));
    if (error || stopping_) co_return false;
    buffer.commit(count);
  }
  // One deadline for all the reads of this request: a byte now and then does not prolong it.
  stream.expires_after(settings_.read_s);
  Parser parser;
  parser.header_limit(static_cast<std::uint32_t>(settings_.header_bytes_max));
  parser.body_limit(settings_.body_bytes_max);
  const auto refuse = [&](Response why) {
    response = std::move(why);
    framing.keep_alive = false;  // what follows on the connection may be the rest of a body that nobody read
    return true;
  };

  co_await bhttp::async_read_header(stream, buffer, parser, net::redirect_error(net::use_awaitable, error));
  if (stopping_) co_return false;
  framing.without_body = parser.get().method() == bhttp::verb::head;
  if (error) {
    std::optional<Response> why = refusal_of(error, settings_);
    if (!why) co_return false;
    co_return refuse(std::move(*why));
  }
  if (std::optional<Response> why = refusal(parser.get(), hosts_)) co_return refuse(std::move(*why));
  tl::expected<Request, Response> read = request_of(parser.get(), hosts_);
  if (!read) co_return refuse(std::move(read.error()));

  if (!parser.is_done()) {
    if (parser.get().count(bhttp::field::expect) > 0 && parser.get().version() >= 11) {
      constexpr std::string_view go_on = "HTTP/1.1 100 Continue\r\n\r\n";
      const auto bytes = net::buffer(go_on.data(), go_on.size());
      co_await net::async_write(stream, bytes, net::redirect_error(net::use_awaitable, error));
      if (error) co_return false;
    }
    co_await bhttp::async_read(stream, buffer, parser, net::redirect_error(net::use_awaitable, error));
    if (stopping_ && error) co_return false;
    if (error) {
      std::optional<Response> why = refusal_of(error, settings_);
      if (!why) co_return false;
      co_return refuse(std::move(*why));
    }
  }
  framing.keep_alive = parser.keep_alive();
  framing.version = parser.get().version();
  read->body = std::move(parser.get().body());
  request = std::move(*read);
  co_return true;
}

net::awaitable<Response> Core::handle(const Request& request) {
  std::string what;
  try {
    Response response = co_await handler_(request);
    if (is_well_formed(response)) co_return response;
    what = "the answer's status or headers are malformed";
  } catch (const std::exception& exception) {
    what = exception.what();
  } catch (...) {
    what = "unknown exception";
  }
  report(request.method + " " + shown(request.path, 200) + " failed: " + what);
  co_return problem(500, "", "the service could not answer this request; its log says why");
}

net::awaitable<bool> Core::write(Connection& connection, const Response& response, Framing framing) {
  std::string first = head_of(response, framing);
  const bool has_body = !framing.without_body && response.status != 204 && response.status != 304;
  const std::string_view body = has_body ? std::string_view(response.body) : std::string_view();
  // A small answer is one write; a large one goes piece by piece, each with the full time.
  const std::size_t with_head = std::min(body.size(), piece_bytes);
  first.append(body.substr(0, with_head));
  error_code error;
  connection.stream.expires_after(settings_.write_s);
  const auto head_bytes = net::buffer(first);
  co_await net::async_write(connection.stream, head_bytes, net::redirect_error(net::use_awaitable, error));
  for (std::size_t at = with_head; !error && at < body.size(); at += piece_bytes) {
    const std::string_view piece = body.substr(at, piece_bytes);
    connection.stream.expires_after(settings_.write_s);
    const auto bytes = net::buffer(piece.data(), piece.size());
    co_await net::async_write(connection.stream, bytes, net::redirect_error(net::use_awaitable, error));
  }
  co_return !error;
}

// Closes in the way that lets the last answer arrive (RFC 9112, 9.6): a close with unread bytes waiting
// resets the connection, and a peer that is still sending would lose the answer with it.
net::awaitable<void> Core::farewell(Connection& connection) {
  error_code error;
  connection.stream.socket().shutdown(net::socket_base::shutdown_send, error);
  if (error || stopping_) co_return;
  connection.interruptible = true;
  connection.stream.expires_after(farewell_s);
  std::array<char, 8192> sink{};
  for (std::size_t total = 0; total < farewell_bytes_max && !stopping_;) {
    const auto space = net::buffer(sink);
    const std::size_t count =
        co_await connection.stream.async_read_some(space, net::redirect_error(net::use_awaitable, error));
    if (error) break;
    total += count;
  }
}

net::awaitable<void> Core::refuse_connection(Place place) {
  Connection& connection = *place;
  Response response = problem(
      503, "",
      "all " + std::to_string(settings_.connections_max) + " connections are taken; try again in a moment");
  response.headers["Retry-After"] = "1";
  const bool written = co_await write(connection, response, Framing{});
  if (written) co_await farewell(connection);
}

class BeastServer final : public Server {
 public:
  explicit BeastServer(net::io_context& io, std::shared_ptr<Core> core) : io_(io), core_(std::move(core)) {}
  BeastServer(const BeastServer&) = delete;
  BeastServer& operator=(const BeastServer&) = delete;
  ~BeastServer() override { BeastServer::stop(); }
  void start() override { core_->start(); }
  void stop() override {
    net::post(io_, [core = core_] { core->stop_now(); });
  }
  bool stopped() const override { return core_->stopped(); }
  std::string endpoint() const override { return core_->endpoint(); }

 private:
  net::io_context& io_;
  std::shared_ptr<Core> core_;
};

}  // namespace

Result<std::unique_ptr<Server>> Server::open(net::io_context& io, ServerSettings settings, Handler handler) {
  const auto core = std::make_shared<Core>(io, std::move(settings), std::move(handler));
  if (std::optional<Error> error = core->listen(io)) return failure(std::move(*error));
  return std::make_unique<BeastServer>(io, core);
}

}  // namespace nightweigh::http

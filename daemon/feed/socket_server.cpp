#include "daemon/feed/socket_server.h"

#include <sys/socket.h>
#include <sys/stat.h>
#include <unistd.h>

#include <algorithm>
#include <array>
#include <atomic>
#include <boost/asio/basic_socket_acceptor.hpp>
#include <boost/asio/buffer.hpp>
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
#include <cerrno>
#include <cstring>
#include <set>
#include <string_view>

namespace nightweigh::feed {

namespace {

namespace asio = boost::asio;
using boost::system::error_code;
using Protocol = asio::generic::stream_protocol;
using Acceptor = asio::basic_socket_acceptor<Protocol>;
using Duration = std::chrono::milliseconds;

// A refusal before the connection is closed: what the other side has still to send is read and dropped for
// so long, because closing a socket with unread bytes would throw the refusal away.
constexpr Duration drain_limit = std::chrono::seconds(2);
// Answers that nobody reads delay a stop by so much at most.
constexpr Duration stopping_write_limit = std::chrono::seconds(2);
constexpr Duration accept_pause = std::chrono::milliseconds(100);
// Connections beyond the bound that are being told so; further ones are closed without a word.
constexpr std::size_t turned_away_max = 64;

std::string text_of(const asio::ip::tcp::endpoint& endpoint) {
  const std::string address = endpoint.address().to_string();
  return (endpoint.address().is_v6() ? "[" + address + "]" : address) + ":" + std::to_string(endpoint.port());
}

// One connection's socket and the time limit on its current operation.
class Connection {
 public:
  Connection(Protocol::socket socket, std::uint64_t number)
      : socket(std::move(socket)), number(number), timer_(this->socket.get_executor()) {}

  // The socket is closed when `limit` passes before the next arm() or disarm(); the operation that waits
  // then ends with an error.
  void arm(Duration limit, const std::shared_ptr<Connection>& self) {
    const std::uint64_t generation = ++generation_;
    timer_.expires_after(limit);
    timer_.async_wait([self, generation](error_code ec) {
      // A timer that was expired already cannot be cancelled any more; the number tells.
      if (!ec && generation == self->generation_) self->close();
    });
  }
  void disarm() {
    ++generation_;
    timer_.cancel();
  }
  void close() {
    error_code ignored;
    socket.close(ignored);
  }

  Protocol::socket socket;
  const std::uint64_t number;
  enum class Doing { reading, delivering, writing } doing = Doing::reading;

 private:
  asio::steady_timer timer_;
  std::uint64_t generation_ = 0;
};
using ConnectionPtr = std::shared_ptr<Connection>;

class State : public std::enable_shared_from_this<State> {
 public:
  State(asio::io_context& io, SocketSettings settings, Deliver deliver, Report report)
      : io_(io),
        settings_(std::move(settings)),
        deliver_(std::move(deliver)),
        report_(std::move(report)),
        acceptor_(io),
        pause_(io) {}
  ~State() { remove_socket_file(); }
  State(const State&) = delete;
  State& operator=(const State&) = delete;

  tl::expected<void, Error> listen() { return settings_.address.empty() ? listen_unix() : listen_tcp(); }

  void start() {
    asio::co_spawn(
        io_, [self = shared_from_this()] { return self->accept_loop(); }, asio::detached);
  }

  void stop() {
    if (std::exchange(stopping_, true)) return;
    error_code ignored;
    acceptor_.close(ignored);
    pause_.cancel();
    remove_socket_file();
    for (const ConnectionPtr& connection : connections_) {
      if (connection->doing == Connection::Doing::reading) connection->close();
      if (connection->doing == Connection::Doing::writing) connection->arm(stopping_write_limit, connection);
    }
    update_stopped();
  }

  bool stopped() const { return stopped_; }
  const std::string& endpoint() const { return endpoint_; }
  asio::io_context& io() { return io_; }

 private:
  Error bind_error(const error_code& ec) const {
    const bool in_use = ec == asio::error::address_in_use;
    return {in_use ? ErrorKind::busy : ErrorKind::storage, "feed socket " + endpoint_,
            in_use ? "the address is in use" : "cannot be opened", ec.message(),
            in_use ? "Stop the program that listens there, or choose another feed_socket in the settings"
                   : "Choose another feed_socket in the settings"};
  }

  tl::expected<void, Error> listen_tcp() {
    error_code ec;
    const asio::ip::address address = asio::ip::make_address(settings_.address, ec);
    if (ec || !address.is_loopback()) {
      return failure(
          {ErrorKind::bad_settings, "feed_socket",
           ec ? "is not a numeric address" : "is not a loopback address, and this version asks for no token",
           shown(settings_.address), "Write 127.0.0.1 or [::1], or unix: and a path"});
    }
    asio::ip::tcp::endpoint endpoint(address, settings_.port);
    endpoint_ = text_of(endpoint);
    acceptor_.open(Protocol(endpoint.protocol()), ec);
    // A restart must not wait until connections of the previous run have been forgotten.
    if (!ec) acceptor_.set_option(asio::socket_base::reuse_address(true), ec);
    if (!ec) acceptor_.bind(Protocol::endpoint(endpoint), ec);
    if (!ec) acceptor_.listen(asio::socket_base::max_listen_connections, ec);
    if (ec) return failure(bind_error(ec));
    const Protocol::endpoint bound = acceptor_.local_endpoint(ec);
    if (ec) return failure(bind_error(ec));
    std::memcpy(endpoint.data(), bound.data(), std::min(bound.size(), endpoint.capacity()));
    endpoint_ = text_of(endpoint);
    return {};
  }

  tl::expected<void, Error> listen_unix() {
    const std::string path = settings_.path.string();
    endpoint_ = "unix:" + path;
    // sun_path of sockaddr_un holds 108 bytes with the closing NUL.
    if (path.empty() || path.size() > 107) {
      return failure({ErrorKind::bad_settings, "feed_socket", "is not a path of 1 to 107 bytes", shown(path),
                      "Choose a shorter path for the socket"});
    }
    const Protocol::endpoint endpoint{asio::local::stream_protocol::endpoint(path)};
    if (auto free = make_room(path, endpoint); !free) return free;
    error_code ec;
    acceptor_.open(endpoint.protocol(), ec);
    if (!ec) acceptor_.bind(endpoint, ec);
    if (ec) return failure(bind_error(ec));
    struct stat status {};
    // Nobody can connect before listen(), so the mode is right before anybody may try.
    if (::chmod(path.c_str(), 0600) != 0 || ::lstat(path.c_str(), &status) != 0) {
      return failure(bind_error(error_code(errno, boost::system::system_category())));
    }
    file_device_ = status.st_dev;
    file_inode_ = status.st_ino;
    file_made_ = true;
    acceptor_.listen(asio::socket_base::max_listen_connections, ec);
    if (ec) return failure(bind_error(ec));
    return {};
  }

  // Removes a socket file that a dead process left.
  tl::expected<void, Error> make_room(const std::string& path, const Protocol::endpoint& endpoint) {
    struct stat status {};
    if (::lstat(path.c_str(), &status) != 0) return {};  // nothing there; bind tells of anything else
    if (!S_ISSOCK(status.st_mode)) {
      return failure({ErrorKind::bad_settings, "feed_socket", "is a file that is no socket", shown(path),
                      "Choose another path; this file is left alone"});
    }
    Protocol::socket probe(io_);
    error_code ec;
    probe.connect(endpoint, ec);
    if (ec != asio::error::connection_refused && ec != asio::error::not_found &&
        ec != error_code(ENOENT, boost::system::system_category())) {
      return failure({ErrorKind::busy, "feed socket " + endpoint_, "somebody listens there already",
                      ec ? ec.message() : std::string(),
                      "Stop the other service, or choose another feed_socket in the settings"});
    }
    ::unlink(path.c_str());
    return {};
  }

  void remove_socket_file() {
    if (!std::exchange(file_made_, false)) return;
    struct stat status {};
    const std::string path = settings_.path.string();
    // Only our own: another service may have put its socket there since.
    if (::lstat(path.c_str(), &status) == 0 && status.st_dev == file_device_ &&
        status.st_ino == file_inode_) {
      ::unlink(path.c_str());
    }
  }

  void update_stopped() {
    if (stopping_ && !accepting_ && connections_.empty()) stopped_ = true;
  }

  asio::awaitable<void> accept_loop() {
    accepting_ = true;
    std::uint64_t number = 0;
    while (!stopping_) {
      error_code ec;
      Protocol::socket socket =
          co_await acceptor_.async_accept(asio::redirect_error(asio::use_awaitable, ec));
      if (stopping_) break;
      if (ec) {
        // Out of descriptors or memory: the waiting connection stays in the queue, and asking again at once
        // would spin.
        if (ec != asio::error::connection_aborted) {
          report("feed socket " + endpoint_ + ": cannot accept a connection: " + ec.message());
          pause_.expires_after(accept_pause);
          co_await pause_.async_wait(asio::redirect_error(asio::use_awaitable, ec));
        }
        continue;
      }
      if (!settings_.address.empty()) socket.set_option(asio::ip::tcp::no_delay(true), ec);
      const auto connection = std::make_shared<Connection>(std::move(socket), ++number);
      const bool over = connections_.size() - turned_away_ >= settings_.connections_max;
      if (over && turned_away_ >= turned_away_max) continue;
      turned_away_ += over ? 1 : 0;
      connections_.insert(connection);
      asio::co_spawn(
          io_,
          [self = shared_from_this(), connection, over] {
            return over ? self->turn_away(connection) : self->serve(connection);
          },
          [self = shared_from_this(), connection, over](const std::exception_ptr&) {
            connection->disarm();
            connection->close();
            self->connections_.erase(connection);
            self->turned_away_ -= over ? 1 : 0;
            self->update_stopped();
          });
    }
    accepting_ = false;
    update_stopped();
  }

  asio::awaitable<void> turn_away(ConnectionPtr connection) {
    RowError error{
        ErrorKind::busy,
        0,
        "",
        "",
        "the service has its " + std::to_string(settings_.connections_max) + " connections already",
        "Close one of them, or send again later"};
    co_await refuse_and_close(connection, std::move(error));
  }

  // Reads lines and answers each; ends when the other side does, a limit is passed, or stop() was called.
  asio::awaitable<void> serve(ConnectionPtr connection) {
    std::array<char, 16384> chunk{};
    std::string pending;  // bytes after the last newline that was handled
    for (;;) {
      error_code ec;
      connection->doing = Connection::Doing::reading;
      connection->arm(settings_.idle_limit, connection);
      const std::size_t got = co_await connection->socket.async_read_some(
          asio::buffer(chunk), asio::redirect_error(asio::use_awaitable, ec));
      connection->disarm();
      if (stopping_) co_return;
      if (ec) {
        if (ec == asio::error::eof && !pending.empty()) {
          RowError error{ErrorKind::bad_input,
                         0,
                         "",
                         "",
                         "the connection ended before the line did, so it was not taken",
                         "End every line with a newline and send it again"};
          co_await refuse_and_close(connection, std::move(error));
        }
        co_return;
      }
      const std::string_view bytes(chunk.data(), got);
      std::size_t at = 0;
      for (;;) {
        const std::size_t newline = bytes.find('\n', at);
        const std::string_view part = bytes.substr(at, newline - at);
        if (pending.size() + part.size() > settings_.limits.line_bytes_max) {
          std::string().swap(pending);
          RowError error{ErrorKind::limit,
                         0,
                         "",
                         "",
                         "the line is longer than the limit of " +
                             std::to_string(settings_.limits.line_bytes_max) +
                             " bytes; the connection is closed",
                         "Send the rows as several batches, or put a file into the drop folder"};
          co_await refuse_and_close(connection, std::move(error));
          co_return;
        }
        pending.append(part);
        if (newline == std::string_view::npos) break;
        at = newline + 1;
        if (!pending.empty() && pending.back() == '\r') pending.pop_back();
        if (pending.empty()) continue;
        const bool open = co_await take(connection, std::exchange(pending, std::string()));
        if (!open) co_return;
      }
    }
  }

  // One line: delivered and answered. False when the connection must end.
  asio::awaitable<bool> take(ConnectionPtr connection, std::string line) {
    connection->doing = Connection::Doing::delivering;
    Acknowledgement answer;
    std::string source = "socket: connection " + std::to_string(connection->number);
    std::string failed;
    try {
      answer = co_await deliver_(std::move(line), true, std::move(source));
    } catch (const std::exception& error) {
      failed = error.what();
      if (failed.empty()) failed = "unknown";
    }
    if (!failed.empty()) {
      report("feed socket " + endpoint_ + ": a batch failed: " + failed);
      answer = refusal(
          "", {{ErrorKind::storage, 0, "", shown(failed), "the service failed while it took the batch",
                "Send it again: a batch that was stored is answered as known"}});
    }
    std::string text = answer.to_json();
    const bool written = co_await write_line(connection, std::move(text));
    co_return written && !stopping_;
  }

  asio::awaitable<bool> write_line(ConnectionPtr connection, std::string text) {
    text.push_back('\n');
    connection->doing = Connection::Doing::writing;
    // The limit is on each piece: a slow reader of a long answer has time as long as it reads at all.
    std::size_t written = 0;
    while (written < text.size()) {
      error_code ec;
      connection->arm(
          stopping_ ? std::min(settings_.write_limit, stopping_write_limit) : settings_.write_limit,
          connection);
      const std::size_t put = co_await connection->socket.async_write_some(
          asio::buffer(text.data() + written, text.size() - written),
          asio::redirect_error(asio::use_awaitable, ec));
      connection->disarm();
      written += put;
      if (ec) co_return false;
    }
    co_return true;
  }

  asio::awaitable<void> refuse_and_close(ConnectionPtr connection, RowError error) {
    std::vector<RowError> errors;
    errors.push_back(std::move(error));
    std::string text = refusal("", std::move(errors)).to_json();
    const bool written = co_await write_line(connection, std::move(text));
    if (!written) co_return;
    error_code ec;
    connection->socket.shutdown(asio::socket_base::shutdown_send, ec);
    std::array<char, 16384> dropped{};
    connection->doing = Connection::Doing::reading;
    connection->arm(drain_limit, connection);  // for the whole of what follows
    while (!ec && !stopping_) {
      co_await connection->socket.async_read_some(asio::buffer(dropped),
                                                  asio::redirect_error(asio::use_awaitable, ec));
    }
  }

  void report(const std::string& line) {
    if (report_) report_(line);
  }

  asio::io_context& io_;
  const SocketSettings settings_;
  const Deliver deliver_;
  const Report report_;
  Acceptor acceptor_;
  asio::steady_timer pause_;
  std::string endpoint_;
  std::set<ConnectionPtr> connections_;
  std::size_t turned_away_ = 0;  // of connections_, those that are only told that there are too many
  bool accepting_ = false;
  bool stopping_ = false;
  std::atomic<bool> stopped_ = false;
  bool file_made_ = false;
  dev_t file_device_ = 0;
  ino_t file_inode_ = 0;
};

class Server final : public SocketServer {
 public:
  explicit Server(std::shared_ptr<State> state) : state_(std::move(state)) {}
  ~Server() override { Server::stop(); }
  Server(const Server&) = delete;
  Server& operator=(const Server&) = delete;

  void start() override { state_->start(); }
  void stop() override {
    asio::post(state_->io(), [state = state_] { state->stop(); });
  }
  bool stopped() const override { return state_->stopped(); }
  std::string endpoint() const override { return state_->endpoint(); }

 private:
  std::shared_ptr<State> state_;
};

}  // namespace

Result<std::unique_ptr<SocketServer>> SocketServer::open(asio::io_context& io, SocketSettings settings,
                                                         Deliver deliver, Report report) {
  auto state = std::make_shared<State>(io, std::move(settings), std::move(deliver), std::move(report));
  if (auto listening = state->listen(); !listening) return failure(std::move(listening.error()));
  return std::make_unique<Server>(std::move(state));
}

}  // namespace nightweigh::feed

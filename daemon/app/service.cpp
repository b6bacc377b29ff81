#include "daemon/app/service.h"

#include <utility>  // before the Asio headers

#include <spdlog/sinks/stdout_color_sinks.h>
#include <spdlog/spdlog.h>
#include <systemd/sd-daemon.h>

#include <boost/asio/co_spawn.hpp>
#include <boost/asio/detached.hpp>
#include <boost/asio/io_context.hpp>
#include <boost/asio/post.hpp>
#include <boost/asio/redirect_error.hpp>
#include <boost/asio/signal_set.hpp>
#include <boost/asio/steady_timer.hpp>
#include <boost/asio/thread_pool.hpp>
#include <boost/asio/use_awaitable.hpp>
#include <csignal>
#include <iostream>
#include <nlohmann/json.hpp>
#include <optional>
#include <thread>

#include "daemon/feed/drop_folder.h"
#include "daemon/feed/socket_server.h"
#include "daemon/http/server.h"
#include "daemon/platform/clock.h"
#include "daemon/platform/files.h"
#include "daemon/platform/lock.h"
#include "daemon/runner/answers.h"
#include "daemon/runner/on_pool.h"
#include "daemon/runner/runner.h"
#include "daemon/store/store.h"

namespace nightweigh::app {

namespace {

namespace asio = boost::asio;

constexpr auto stop_limit = std::chrono::seconds(10);
constexpr auto retry_after_trouble = std::chrono::seconds(15);

spdlog::sink_ptr console(bool on_standard_error) {
  if (on_standard_error) return std::make_shared<spdlog::sinks::stderr_color_sink_mt>();
  return std::make_shared<spdlog::sinks::stdout_color_sink_mt>();
}

class Service {
 public:
  Service(const settings::Settings& settings, bool as_json)
      : settings_(settings),
        as_json_(as_json),
        endpoints_file_(settings.service.data_dir / "endpoints.json"),
        log_(std::make_shared<spdlog::logger>("nightweigh", console(as_json))) {
    log_->set_level(spdlog::level::from_str(settings.service.log_level));
    log_->flush_on(spdlog::level::info);
  }

  // In this order: folder, lock, database with its migrations, books, ports. READY is said when all stand.
  Result<void> run() {
    if (Result<void> made = platform::ensure_directory(settings_.service.data_dir); !made) return made;
    Result<platform::DirectoryLock> lock = platform::DirectoryLock::take(settings_.service.data_dir);
    if (!lock) return failure(lock.error());
    const std::filesystem::path database = settings_.service.data_dir / "nightweigh.db";
    Result<std::unique_ptr<store::Store>> store = store::Store::open(database, store::Store::Mode::write);
    if (!store) return failure(store.error());

    runner::Answers answers(database, clock_);
    const auto publish = [this, &answers](runner::BookViewPointer view) {
      asio::post(network_, [&answers, view = std::move(view)] { answers.publish(view); });
    };
    Result<std::unique_ptr<runner::Runner>> runner = runner::Runner::open(
        settings_.books,
        {**store, clock_, *log_, publish, feed::Limits{}, std::max(1U, std::thread::hardware_concurrency())});
    if (!runner) return failure(runner.error());
    runner_ = runner->get();

    http::Handler handler = answers.handler();
    if (Result<void> listening = listen(std::move(handler)); !listening) return listening;
    if (Result<void> written = write_endpoints(); !written) return written;

    asio::signal_set signals(network_, SIGTERM, SIGINT);
    signals.async_wait([this, &answers](const boost::system::error_code& error, int signal) {
      if (error) return;
      log_->info("signal {}: finishing the batch in hand, then stopping", signal);
      answers.set_ready(false);
      stop();
    });
    asio::post(network_, [this, &answers] {
      answers.set_ready(true);
      sd_notify(0, "READY=1\nSTATUS=taking closes");
      if (as_json_) std::cout << endpoints().dump() << std::endl;
      log_->info("ready: http {} feed {} drop {}", http_->endpoint(), socket_ ? socket_->endpoint() : "off",
                 drop_ ? settings_.service.drop_dir.string() : "off");
    });
    asio::co_spawn(network_, keep_up(), asio::detached);
    http_->start();
    if (socket_) socket_->start();
    if (drop_) drop_->start();
    network_.run();

    runner_->request_stop();
    writer_.join();
    std::error_code ignored;
    std::filesystem::remove(endpoints_file_, ignored);
    log_->info("stopped");
    return {};
  }

 private:
  // Hands a batch to the writer thread; the network thread goes on meanwhile.
  asio::awaitable<feed::Acknowledgement> deliver(std::string bytes, bool is_json, std::string source) {
    auto work = [this, bytes = std::move(bytes), is_json, source = std::move(source)] {
      return runner_->take(bytes, is_json, source);
    };
    asio::awaitable<feed::Acknowledgement> taken = runner::on_pool(writer_, std::move(work));
    co_return co_await std::move(taken);
  }

  // Nights that stored closes make possible: once after the start, and again after trouble with storage.
  asio::awaitable<void> keep_up() {
    const auto catch_up = [this] {
      runner_->catch_up();
      return true;
    };
    const auto in_trouble = [this] { return runner_->in_trouble(); };
    bool due = true;
    while (!stopping_) {
      if (due) co_await runner::on_pool(writer_, catch_up);
      boost::system::error_code cancelled;
      timer_.expires_after(retry_after_trouble);
      if (stopping_) break;
      co_await timer_.async_wait(asio::redirect_error(asio::use_awaitable, cancelled));
      if (stopping_) break;
      due = co_await runner::on_pool(writer_, in_trouble);
    }
    kept_up_ = true;
  }

  Result<void> listen(http::Handler handler) {
    const feed::Deliver deliver = [this](std::string bytes, bool is_json, std::string source) {
      return this->deliver(std::move(bytes), is_json, std::move(source));
    };
    const auto report = [this](const std::string& line) { log_->warn("{}", line); };
    const settings::ServiceSettings& service = settings_.service;

    http::ServerSettings http_settings;
    http_settings.address = service.http.address;
    http_settings.port = service.http.port;
    http_settings.path = service.http.path;
    http_settings.report = report;
    Result<std::unique_ptr<http::Server>> http =
        http::Server::open(network_, http_settings, std::move(handler));
    if (!http) return failure(http.error());
    http_ = std::move(*http);

    if (service.feed_socket.kind != settings::Endpoint::Kind::off) {
      feed::SocketSettings socket_settings;
      socket_settings.address = service.feed_socket.address;
      socket_settings.port = service.feed_socket.port;
      socket_settings.path = service.feed_socket.path;
      Result<std::unique_ptr<feed::SocketServer>> socket =
          feed::SocketServer::open(network_, socket_settings, deliver, report);
      if (!socket) return failure(socket.error());
      socket_ = std::move(*socket);
    }
    if (!service.drop_dir.empty()) {
      Result<std::unique_ptr<feed::DropFolder>> drop = feed::DropFolder::open(
          network_, service.drop_dir, feed::Limits{}, deliver, std::chrono::seconds(5), report);
      if (!drop) return failure(drop.error());
      drop_ = std::move(*drop);
    }
    return {};
  }

  nlohmann::ordered_json endpoints() const {
    return {{"http", http_->endpoint()}, {"feed", socket_ ? socket_->endpoint() : std::string()}};
  }

  Result<void> write_endpoints() {
    return platform::write_file_atomically(endpoints_file_, endpoints().dump() + "\n");
  }

  void stop() {
    stopping_ = true;
    sd_notify(0, "STOPPING=1");
    runner_->request_stop();
    timer_.cancel();
    http_->stop();
    if (socket_) socket_->stop();
    if (drop_) drop_->stop();
    asio::co_spawn(network_, wait_for_the_end(), asio::detached);
  }

  asio::awaitable<void> wait_for_the_end() {
    const auto deadline = std::chrono::steady_clock::now() + stop_limit;
    const auto all_stopped = [this] {
      return kept_up_ && http_->stopped() && (!socket_ || socket_->stopped()) && (!drop_ || drop_->stopped());
    };
    asio::steady_timer look(network_);
    while (!all_stopped() && std::chrono::steady_clock::now() < deadline) {
      look.expires_after(std::chrono::milliseconds(20));
      co_await look.async_wait(asio::use_awaitable);
    }
    if (!all_stopped()) log_->warn("connections were still open after {} s and are cut", stop_limit.count());
    network_.stop();
  }

  const settings::Settings& settings_;
  bool as_json_;
  std::filesystem::path endpoints_file_;
  std::shared_ptr<spdlog::logger> log_;
  platform::SystemClock clock_;
  asio::io_context network_{1};
  asio::thread_pool writer_{1};
  asio::steady_timer timer_{network_};
  runner::Runner* runner_ = nullptr;
  std::unique_ptr<http::Server> http_;
  std::unique_ptr<feed::SocketServer> socket_;
  std::unique_ptr<feed::DropFolder> drop_;
  bool stopping_ = false;  // network thread only
  bool kept_up_ = false;   // network thread only
};

}  // namespace

Result<void> serve(const settings::Settings& settings, bool as_json) {
  return Service(settings, as_json).run();
}

}  // namespace nightweigh::app

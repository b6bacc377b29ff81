// An io_context on its own thread, a folder for one test, and a runner that answers as told.
#pragma once

#include <doctest/doctest.h>
#include <stdlib.h>

#include <utility>  // before the Asio headers

#include <boost/asio/co_spawn.hpp>
#include <boost/asio/executor_work_guard.hpp>
#include <boost/asio/io_context.hpp>
#include <boost/asio/post.hpp>
#include <boost/asio/steady_timer.hpp>
#include <boost/asio/use_awaitable.hpp>
#include <chrono>
#include <filesystem>
#include <fstream>
#include <functional>
#include <mutex>
#include <optional>
#include <sstream>
#include <string>
#include <thread>
#include <vector>

#include "daemon/feed/deliver.h"

namespace nightweigh::feed {

// Patient: a loaded machine is slow, and a good run does not wait.
inline bool eventually(const std::function<bool()>& done) {
  const auto end = std::chrono::steady_clock::now() + std::chrono::seconds(30);
  while (std::chrono::steady_clock::now() < end) {
    if (done()) return true;
    std::this_thread::sleep_for(std::chrono::milliseconds(2));
  }
  return done();
}

class TestFolder {
 public:
  TestFolder() {
    std::string pattern = (std::filesystem::temp_directory_path() / "feed-XXXXXX").string();
    REQUIRE(::mkdtemp(pattern.data()) != nullptr);
    path = pattern;
  }
  ~TestFolder() {
    std::error_code ignored;
    std::filesystem::remove_all(path, ignored);
  }
  TestFolder(const TestFolder&) = delete;
  TestFolder& operator=(const TestFolder&) = delete;
  std::filesystem::path path;
};

inline std::string read_text(const std::filesystem::path& path) {
  std::ifstream in(path, std::ios::binary);
  std::ostringstream out;
  out << in.rdbuf();
  return out.str();
}

inline void write_text(const std::filesystem::path& path, const std::string& text) {
  std::ofstream(path, std::ios::binary) << text;
}

class Network {
 public:
  Network() : guard_(io.get_executor()), thread_([this] { io.run(); }) {}
  ~Network() {
    guard_.reset();
    thread_.join();
  }
  Network(const Network&) = delete;
  Network& operator=(const Network&) = delete;

 public:
  boost::asio::io_context io;

 private:
  boost::asio::executor_work_guard<boost::asio::io_context::executor_type> guard_;
  std::thread thread_;
};

// Records what was delivered; taken unless `answer` says otherwise, after `delay`.
class FakeRunner {
 public:
  struct Delivery {
    std::string bytes;
    bool is_json;
    std::string source;
  };
  explicit FakeRunner(boost::asio::io_context& io) : io_(io) {}

  std::function<Acknowledgement(const std::string& bytes, std::size_t number)> answer;
  std::chrono::milliseconds delay{0};

  Deliver deliver() {
    return [this](std::string bytes, bool is_json,
                  std::string source) -> boost::asio::awaitable<Acknowledgement> {
      std::size_t number = 0;
      {
        const std::lock_guard<std::mutex> lock(mutex_);
        deliveries_.push_back({bytes, is_json, source});
        number = deliveries_.size();
      }
      if (delay.count() > 0) {
        boost::asio::steady_timer timer(io_, delay);
        co_await timer.async_wait(boost::asio::use_awaitable);
      }
      Acknowledgement out;
      if (answer) {
        out = answer(bytes, number);
      } else {
        out.status = Acknowledgement::Status::taken;
        out.rows = number;
      }
      co_return out;
    };
  }
  std::vector<Delivery> deliveries() const {
    const std::lock_guard<std::mutex> lock(mutex_);
    return deliveries_;
  }
  std::size_t count() const { return deliveries().size(); }
  Report report() {
    return [this](const std::string& line) {
      const std::lock_guard<std::mutex> lock(mutex_);
      lines_.push_back(line);
    };
  }
  std::vector<std::string> lines() const {
    const std::lock_guard<std::mutex> lock(mutex_);
    return lines_;
  }

 private:
  boost::asio::io_context& io_;
  mutable std::mutex mutex_;
  std::vector<Delivery> deliveries_;
  std::vector<std::string> lines_;
};

}  // namespace nightweigh::feed

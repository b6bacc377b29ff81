#include "daemon/feed/drop_folder.h"

#include <sys/inotify.h>

#include <algorithm>
#include <array>
#include <atomic>
#include <boost/asio/buffer.hpp>
#include <boost/asio/co_spawn.hpp>
#include <boost/asio/detached.hpp>
#include <boost/asio/posix/stream_descriptor.hpp>
#include <boost/asio/post.hpp>
#include <boost/asio/redirect_error.hpp>
#include <boost/asio/steady_timer.hpp>
#include <boost/asio/use_awaitable.hpp>
#include <cerrno>
#include <map>
#include <optional>
#include <string>
#include <system_error>

#include "daemon/feed/drop_files.h"

namespace nightweigh::feed {

namespace {

namespace asio = boost::asio;
namespace fs = std::filesystem;
using boost::system::error_code;
using Clock = std::chrono::steady_clock;
using Duration = std::chrono::milliseconds;

// A file counts as finished when two looks at least so far apart saw the same size and modification time ...
constexpr Duration looks_apart = std::chrono::milliseconds(200);
// ... or when the first look already finds it untouched for so long.
constexpr Duration untouched_long = std::chrono::seconds(2);
// Hints come in showers; the folder is not read more often than this.
constexpr Duration scans_apart = std::chrono::milliseconds(20);
constexpr Duration retry_max = std::chrono::minutes(1);

bool has_extension(const std::string& name, std::string_view extension) {
  if (name.size() <= extension.size()) return false;
  return std::equal(extension.begin(), extension.end(),
                    name.end() - static_cast<std::ptrdiff_t>(extension.size()),
                    [](char a, char b) { return a == (b >= 'A' && b <= 'Z' ? b - 'A' + 'a' : b); });
}

// The batch may be good: the storage could not take it just now.
bool failed_by_storage(const Acknowledgement& answer) {
  return answer.status == Acknowledgement::Status::refused &&
         std::any_of(answer.errors.begin(), answer.errors.end(), [](const RowError& error) {
           return error.kind == ErrorKind::storage || error.kind == ErrorKind::busy;
         });
}

std::string reason_text(const std::string& name, const Acknowledgement& answer) {
  std::string text = shown(name, 300) + " was refused: nothing of it was stored.\n";
  if (!answer.digest.empty()) text += "digest " + answer.digest + "\n";
  for (const RowError& error : answer.errors) text += error.message() + "\n";
  return text;
}

// Where a file goes and why; kept while the move fails, so that the batch is not delivered again.
struct Verdict {
  bool accepted = false;
  std::string reason;
};

// What is remembered of a file that is still in the folder.
struct Seen {
  FileState state;
  Clock::time_point unchanged_since;
  bool settled = false;
  int failures = 0;
  Clock::time_point not_before;  // of the next try
  std::optional<Verdict> verdict;
};

class State : public std::enable_shared_from_this<State> {
 public:
  State(asio::io_context& io, fs::path folder, Limits limits, Deliver deliver, Duration rescan_every,
        Report report)
      : io_(io),
        folder_(std::move(folder)),
        limits_(limits),
        deliver_(std::move(deliver)),
        rescan_every_(rescan_every),
        report_(std::move(report)),
        timer_(io),
        events_(io) {}

  void open_watch() {
    const int descriptor = ::inotify_init1(IN_NONBLOCK | IN_CLOEXEC);
    if (descriptor < 0) {
      report("drop folder " + shown(folder_.string()) + ": the kernel gives no events (" +
             std::generic_category().message(errno) + "); the folder is read on the timer only");
      return;
    }
    events_.assign(descriptor);
    watch();
  }

  void start() {
    asio::co_spawn(
        io_, [self = shared_from_this()] { return self->run(); }, asio::detached);
    if (events_.is_open()) {
      asio::co_spawn(
          io_, [self = shared_from_this()] { return self->listen(); }, asio::detached);
    }
  }

  void stop() {
    stopping_ = true;
    timer_.cancel();
    error_code ignored;
    events_.close(ignored);
    if (!running_) stopped_ = true;
  }

  bool stopped() const { return stopped_; }
  asio::io_context& io() { return io_; }

  // The folder and its two subfolders.
  std::error_code make_folders() {
    std::error_code ec;
    for (const fs::path& folder : {folder_, accepted(), refused()}) {
      fs::create_directories(folder, ec);
      if (ec) break;
    }
    return ec;
  }

 private:
  fs::path accepted() const { return folder_ / "accepted"; }
  fs::path refused() const { return folder_ / "refused"; }

  // Adding the same folder again changes nothing; one that was made anew gets a watch again.
  void watch() {
    if (!events_.is_open()) return;
    const int added =
        ::inotify_add_watch(events_.native_handle(), folder_.c_str(),
                            IN_CLOSE_WRITE | IN_MOVED_TO | IN_DELETE_SELF | IN_MOVE_SELF | IN_ONLYDIR);
    if (added >= 0 && added != watched_) {
      if (watched_ >= 0) ::inotify_rm_watch(events_.native_handle(), watched_);  // the old one may be gone
      watched_ = added;
    }
  }

  // Every event, an overflow too, means the same: look again.
  asio::awaitable<void> listen() {
    std::array<char, 4096> dropped{};
    for (;;) {
      error_code ec;
      co_await events_.async_read_some(asio::buffer(dropped), asio::redirect_error(asio::use_awaitable, ec));
      if (ec || stopping_) co_return;
      hinted_ = true;
      if (resting_) timer_.cancel();
    }
  }

  asio::awaitable<void> run() {
    running_ = true;
    while (!stopping_) {
      hinted_ = false;
      next_look_ = rescan_every_;
      try {
        co_await scan();
      } catch (const std::exception& error) {  // memory, a path that cannot be written as text
        report_once("drop folder " + shown(folder_.string()) + ": " + error.what());
      }
      error_code ec;
      if (!stopping_) {
        timer_.expires_after(scans_apart);
        co_await timer_.async_wait(asio::redirect_error(asio::use_awaitable, ec));
      }
      if (!stopping_ && !hinted_) {
        timer_.expires_after(next_look_);
        resting_ = true;
        co_await timer_.async_wait(asio::redirect_error(asio::use_awaitable, ec));
        resting_ = false;
      }
    }
    running_ = false;
    stopped_ = true;
  }

  asio::awaitable<void> scan() {
    watch();
    auto names = list_names(folder_);
    if (!names) {
      report_once(names.error().message());
      seen_.clear();
      // Somebody removed the folder: made again, it works again.
      if (!make_folders()) {
        report_once("drop folder " + shown(folder_.string()) + ": was missing and is made again");
        next_look_ = scans_apart;
      }
      co_return;
    }
    last_report_.clear();
    forget_all_but(*names);
    for (const std::string& name : *names) {
      if (stopping_) co_return;
      const bool go_on = co_await handle(name);
      if (!go_on) co_return;
      // Thousands of files must not keep the thread from its other work.
      co_await asio::post(io_, asio::use_awaitable);
    }
  }

  void forget_all_but(const std::vector<std::string>& names) {
    for (auto it = seen_.begin(); it != seen_.end();) {
      it = std::binary_search(names.begin(), names.end(), it->first) ? std::next(it) : seen_.erase(it);
    }
  }

  // One candidate. False: the storage does not take batches just now, the later names wait too.
  asio::awaitable<bool> handle(std::string name) {
    const fs::path path = folder_ / name;
    const std::optional<FileState> state = look_at(path);
    if (!state) {
      seen_.erase(name);
      co_return true;
    }
    Seen& seen = seen_[name];  // a map: stays where it is, whatever else comes and goes
    if (!is_finished(seen, *state)) {
      look_again_in(looks_apart);
      co_return true;
    }
    if (Clock::now() < seen.not_before) {
      look_again_in(std::chrono::duration_cast<Duration>(seen.not_before - Clock::now()) + Duration(1));
      co_return !(seen.verdict == std::nullopt && storage_failing_);
    }
    bool storage_took_it = true;
    if (!seen.verdict) {
      const bool is_csv = has_extension(name, ".csv"), is_json = has_extension(name, ".json");
      if (!is_csv && !is_json) {
        seen.verdict =
            refuse(name, {ErrorKind::bad_input, 0, "", "", "the file is neither .csv nor .json",
                          "Name it so; names that start with . or end in .part or .tmp are ignored"});
      } else {
        ReadFile file = read_file(path, limits_.bytes_max);
        switch (file.outcome) {
          case ReadFile::Outcome::gone:
            seen_.erase(name);
            co_return true;
          case ReadFile::Outcome::busy:
            // Its closing gives an event; the timer is there should that get lost.
            seen.settled = false;
            seen.unchanged_since = Clock::now();
            look_again_in(looks_apart);
            co_return true;
          case ReadFile::Outcome::failed:
            report("drop folder: " + shown(name) + " cannot be read: " + file.problem);
            wait_longer(seen);
            co_return true;
          case ReadFile::Outcome::too_large:
            seen.state = file.state;
            seen.verdict =
                refuse(name, {ErrorKind::limit, 0, "", "",
                              "the file is " + std::to_string(file.state.size) +
                                  " bytes, more than the limit of " + std::to_string(limits_.bytes_max),
                              "Split it into several batches"});
            break;
          case ReadFile::Outcome::read:
            seen.state = file.state;
            storage_took_it = co_await deliver(name, std::move(file.bytes), is_json, seen);
            break;
        }
      }
    }
    storage_failing_ = !storage_took_it;
    if (!storage_took_it) {
      wait_longer(seen);
      co_return false;
    }
    move(name, seen);
    co_return true;
  }

  // False when the batch must be delivered again later.
  asio::awaitable<bool> deliver(const std::string& name, std::string bytes, bool is_json, Seen& seen) {
    Acknowledgement answer;
    std::string source = "drop: " + shown(name, 200);
    std::string failed;
    try {
      answer = co_await deliver_(std::move(bytes), is_json, std::move(source));
    } catch (const std::exception& error) {
      failed = error.what();
      if (failed.empty()) failed = "unknown";
    }
    if (failed.empty() && failed_by_storage(answer)) failed = answer.errors.front().message();
    if (!failed.empty()) {
      report("drop folder: " + shown(name) + " stays and is tried again: " + failed);
      co_return false;
    }
    seen.failures = 0;
    const bool accepted = answer.status != Acknowledgement::Status::refused;
    seen.verdict = Verdict{accepted, accepted ? std::string() : reason_text(name, answer)};
    co_return true;
  }

  static Verdict refuse(const std::string& name, RowError error) {
    std::vector<RowError> errors;
    errors.push_back(std::move(error));
    return {false, reason_text(name, refusal("", std::move(errors)))};
  }

  void move(const std::string& name, Seen& seen) {
    const bool accept = seen.verdict->accepted;
    const auto moved =
        move_into(folder_ / name, seen.state, accept ? accepted() : refused(), seen.verdict->reason);
    if (moved || moved.error().kind == ErrorKind::conflict) {
      if (!moved) {
        report(moved.error().message());
        look_again_in(looks_apart);
      }
      seen_.erase(name);
      return;
    }
    report(moved.error().message());
    wait_longer(seen);
  }

  // Remembers the state and says whether it has been the same for long enough.
  static bool is_finished(Seen& seen, const FileState& state) {
    const auto now = Clock::now();
    const bool first_look = seen.state == FileState{};
    if (first_look || !(seen.state == state)) {
      seen = Seen{};
      seen.state = state;
      seen.unchanged_since = now;
      const std::chrono::nanoseconds wall = std::chrono::system_clock::now().time_since_epoch();
      seen.settled = first_look && std::chrono::nanoseconds(state.modified_ns) + untouched_long <= wall;
    } else if (now - seen.unchanged_since >= looks_apart) {
      seen.settled = true;
    }
    return seen.settled;
  }

  void look_again_in(Duration wait) { next_look_ = std::min(next_look_, std::max(wait, Duration(1))); }

  void wait_longer(Seen& seen) {
    Duration wait = rescan_every_ * (1 << std::min(seen.failures++, 10));
    wait = std::min(wait, retry_max);
    seen.not_before = Clock::now() + wait;
    look_again_in(wait);
  }

  void report(const std::string& line) {
    if (report_) report_(line);
  }
  // For what would be said again at every look.
  void report_once(const std::string& line) {
    if (line != last_report_) report(line);
    last_report_ = line;
  }

  asio::io_context& io_;
  const fs::path folder_;
  const Limits limits_;
  const Deliver deliver_;
  const Duration rescan_every_;
  const Report report_;
  asio::steady_timer timer_;
  asio::posix::stream_descriptor events_;
  int watched_ = -1;
  std::map<std::string, Seen> seen_;
  Duration next_look_{};
  std::string last_report_;
  bool hinted_ = false;
  bool resting_ = false;  // until the next look is due; a hint ends it
  bool storage_failing_ = false;
  bool running_ = false;
  bool stopping_ = false;
  std::atomic<bool> stopped_ = false;
};

class Folder final : public DropFolder {
 public:
  explicit Folder(std::shared_ptr<State> state) : state_(std::move(state)) {}
  ~Folder() override { Folder::stop(); }
  Folder(const Folder&) = delete;
  Folder& operator=(const Folder&) = delete;

  void start() override { state_->start(); }
  void stop() override {
    asio::post(state_->io(), [state = state_] { state->stop(); });
  }
  bool stopped() const override { return state_->stopped(); }

 private:
  std::shared_ptr<State> state_;
};

}  // namespace

Result<std::unique_ptr<DropFolder>> DropFolder::open(asio::io_context& io, fs::path folder, Limits limits,
                                                     Deliver deliver, Duration rescan_every, Report report) {
  const std::string name = shown(folder.string());
  auto state = std::make_shared<State>(io, std::move(folder), limits, std::move(deliver),
                                       std::max(rescan_every, Duration(1)), std::move(report));
  if (const std::error_code ec = state->make_folders()) {
    return failure({ErrorKind::storage, "drop_dir", "cannot be made: " + ec.message(), name,
                    "Choose a folder in which the service's user may write"});
  }
  state->open_watch();
  return std::make_unique<Folder>(std::move(state));
}

}  // namespace nightweigh::feed

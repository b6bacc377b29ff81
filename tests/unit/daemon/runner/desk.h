// A runner on a real database in a folder of its own, a clock that stands still, and short ways to feed it.
#pragma once

#include <spdlog/sinks/ostream_sink.h>
#include <spdlog/spdlog.h>

#include <chrono>
#include <map>
#include <memory>
#include <nlohmann/json.hpp>
#include <sstream>
#include <string>
#include <utility>
#include <vector>

#include "daemon/runner/runner.h"
#include "daemon/store/store.h"
#include "tests/unit/daemon/night/book_for_tests.h"
#include "tests/unit/daemon/store/folder.h"

namespace nightweigh::runner::testing {

using night::testing::day;
using night::testing::dec;

inline std::chrono::sys_time<std::chrono::microseconds> noon(const std::string& date) {
  return day(date).days() + std::chrono::hours(12);
}

// ALDER, BRINE, COPPER in single shares from Thursday 2025-01-02.
inline BookSettings book(const std::string& name = "harbour",
                         const std::string& rule = "exponentiated_gradient") {
  BookSettings settings = night::testing::harbour(rule);
  settings.name = name;
  return settings;
}

// What the settings folder would write; only the members that the runner compares matter here.
inline void resolve(BookSettings& settings) {
  nlohmann::json text = {
      {"name", settings.name},
      {"currency", settings.currency},
      {"start", {{"date", settings.start.date.to_string()}, {"cash", settings.start.cash.to_string()}}},
      {"eta", settings.strategy.eta},
      {"instruments", nlohmann::json::array()}};
  for (const Instrument& instrument : settings.instruments)
    text["instruments"].push_back({{"id", instrument.id}});
  settings.resolved_text = text.dump();
  settings.digest = sha256_hex(settings.resolved_text);
}

class Desk {
 public:
  explicit Desk(std::vector<BookSettings> books, const std::string& today = "2026-01-02")
      : books_(std::move(books)), clock_(noon(today)) {
    for (BookSettings& settings : books_) resolve(settings);
    start();
  }

  // Opens the database and the books, as at the start of a process.
  void start() {
    const Result<void> started = try_start();
    if (!started) FAIL(started.error().message());
  }
  Result<void> try_start() {
    runner_.reset();
    store_.reset();
    Result<std::unique_ptr<store::Store>> opened =
        store::Store::open(folder_.database(), store::Store::Mode::write);
    if (!opened) return tl::unexpected<Error>(opened.error());
    store_ = std::move(*opened);
    const auto publish = [this](BookViewPointer view) { views_[view->settings->name] = std::move(view); };
    Result<std::unique_ptr<Runner>> runner = Runner::open(books_, {*store_, clock_, log_, publish, {}, 2});
    if (!runner) return tl::unexpected<Error>(runner.error());
    runner_ = std::move(*runner);
    return {};
  }

  feed::Acknowledgement csv(const std::string& rows) {
    return runner_->take("date,instrument,close\n" + rows, false, "test");
  }
  feed::Acknowledgement whole_day(const std::string& date, const std::string& a = "50",
                                  const std::string& b = "20", const std::string& c = "80") {
    return csv(date + ",ALDER," + a + "\n" + date + ",BRINE," + b + "\n" + date + ",COPPER," + c + "\n");
  }

  std::string head(const std::string& name = "harbour") {
    const Result<store::JournalHead> head = store_->head(name);
    REQUIRE(head);
    return head->hash;
  }

  std::vector<BookSettings>& books() { return books_; }
  Runner& runner() { return *runner_; }
  store::Store& store() { return *store_; }
  const store::Folder& folder() const { return folder_; }
  platform::FixedClock& clock() { return clock_; }
  const BookView& view(const std::string& name = "harbour") const { return *views_.at(name); }
  std::string log_text() const { return text_.str(); }

 private:
  store::Folder folder_;
  std::vector<BookSettings> books_;
  platform::FixedClock clock_;
  std::ostringstream text_;
  spdlog::logger log_{"test", std::make_shared<spdlog::sinks::ostream_sink_mt>(text_)};
  std::map<std::string, BookViewPointer> views_;
  std::unique_ptr<store::Store> store_;
  std::unique_ptr<Runner> runner_;
};

}  // namespace nightweigh::runner::testing

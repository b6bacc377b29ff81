// The queue's worker: batches in, nights out. Synchronous and used by one thread, the writer thread, which
// owns the store; the nights of different books are computed side by side on a pool.
//
//   take():   parse -> admit -> commit the closes -> advance every book that holds one of them
//   advance:  complete days -> process_night (pool) -> commit -> publish, again while there are days
#pragma once

#include <atomic>
#include <boost/asio/thread_pool.hpp>
#include <functional>
#include <map>
#include <memory>
#include <string>
#include <vector>

#include "daemon/feed/acknowledgement.h"
#include "daemon/platform/clock.h"
#include "daemon/runner/book_runner.h"

namespace spdlog {
class logger;
}

namespace nightweigh::runner {

// Gets the new picture of a book after each commit, on the writer thread.
using Publish = std::function<void(BookViewPointer)>;

struct RunnerParts {
  store::Store& store;
  const platform::Clock& clock;
  spdlog::logger& log;
  Publish publish;
  feed::Limits limits;
  unsigned threads = 1;  // of the pool
};

class Runner {
 public:
  // Opens every book and publishes its picture. Nothing is computed yet.
  static Result<std::unique_ptr<Runner>> open(const std::vector<BookSettings>& books, RunnerParts parts);

  feed::Acknowledgement take(const std::string& bytes, bool is_json, const std::string& source);

  // Processes every night that stored closes make possible: after a start, and after trouble with storage.
  void catch_up();
  // A book could not be advanced because of storage; catch_up() may mend it.
  bool in_trouble() const;

  // May be called from any thread: finish the nights in hand, start no more.
  void request_stop() { stop_ = true; }

 private:
  struct Work;
  using Answers = std::map<std::string, feed::BookAnswer>;  // by book

  explicit Runner(RunnerParts parts);
  std::vector<feed::BookAnswer> advance(const std::vector<BookRunner*>& books);
  bool advance_round(std::vector<BookRunner*>& active, Answers& answers);
  void compute(std::vector<Work>& works, bool with_history);
  void report_trouble(BookRunner& book, const std::string& message, Answers& answers);
  std::vector<BookRunner*> holders_of(const feed::ParsedBatch& batch) const;
  void log_nights(const BookRunner& book, const std::vector<night::Night>& nights);
  void publish(const BookRunner& book) { parts_.publish(book.view()); }

  RunnerParts parts_;
  boost::asio::thread_pool pool_;
  std::vector<std::unique_ptr<BookRunner>> books_;
  std::map<std::string, std::vector<const BookRunner*>> by_instrument_;
  std::atomic<bool> stop_ = false;
};

}  // namespace nightweigh::runner

// What HTTP says: the routes of version 1, from the books' pictures in memory and, for past nights, from a
// read-only connection of its own.
//
// Everything but the reading of past nights runs on the network thread, which alone owns the pictures: no
// lock. Past nights are read on a thread of their own, so that a slow disk never holds up an answer.
#pragma once

#include <utility>  // before the Asio headers

#include <boost/asio/thread_pool.hpp>
#include <filesystem>
#include <map>
#include <memory>
#include <string>

#include "daemon/http/server.h"
#include "daemon/platform/clock.h"
#include "daemon/runner/book_view.h"
#include "daemon/store/store.h"

namespace nightweigh::runner {

class Answers {
 public:
  // `database` must exist when the first request for a past night comes.
  Answers(std::filesystem::path database, const platform::Clock& clock);
  ~Answers();

  // On the network thread.
  void publish(BookViewPointer view);
  void set_ready(bool ready) { ready_ = ready; }

  // The routes; keeps a reference to this object.
  http::Handler handler();

 private:
  struct Reader;

  BookViewPointer find(const std::string& book) const;  // null where there is none
  bool is_overdue(const BookView& view) const;
  bool is_stale(const BookView& view) const;
  std::vector<std::string> attention(const BookView& view) const;

  http::Response books() const;
  http::Response book(const BookView& view) const;
  http::Response target(const BookView& view) const;

  const platform::Clock& clock_;
  std::map<std::string, BookViewPointer> views_;
  bool ready_ = false;
  std::unique_ptr<Reader> reader_;
};

}  // namespace nightweigh::runner

// A process that is killed in the middle of storing: what is there afterwards is whole.
#include <doctest/doctest.h>
#include <signal.h>
#include <sys/wait.h>
#include <unistd.h>

#include <array>
#include <chrono>
#include <random>
#include <thread>

#include "tests/unit/daemon/store/folder.h"
#include "tests/unit/daemon/store/samples.h"

namespace nightweigh::store {
namespace {

const std::vector<std::string> books{"harbour", "quay"};
const Date first_date = day_of("2000-01-03");

// Every call adds three nights to each book, after an entry of another kind. Says so on `ready` before the
// first one. Ends by being killed only.
[[noreturn]] void store_for_ever(const std::filesystem::path& file, int ready) {
  const Result<std::unique_ptr<Store>> store = Store::open(file, Store::Mode::write);
  if (!store) ::_exit(1);
  std::vector<int> days;
  for (const std::string& book : books) {
    const auto last = (*store)->log(book, {});
    if (!last) ::_exit(2);
    days.push_back(last->empty() ? 0 : last->front().date.days_since(first_date) + 1);
  }
  if (::write(ready, "y", 1) != 1) ::_exit(5);
  for (int round = 0;; ++round) {
    std::vector<NightToStore> nights;
    for (int i = 0; i < 3; ++i) {
      for (std::size_t book = 0; book < books.size(); ++book) {
        nights.push_back(night_of(books[book], first_date.plus_days(days[book]++).to_string()));
        nights.back().bytes.append(3000, ' ');
        nights.back().snapshot.strategy.append(9000, static_cast<char>(round));
      }
    }
    if (!(*store)->append(books[static_cast<std::size_t>(round) % 2], "settings", "{}")) ::_exit(3);
    if (!(*store)->store_nights(nights)) ::_exit(4);
  }
}

}  // namespace

TEST_CASE("killed at any moment, the journal, the nights and the state agree") {
  const Folder folder;
  std::mt19937_64 random(20260302);
  std::size_t nights_before = 0;
  int grown = 0;
  for (int death = 0; death < 40; ++death) {
    CAPTURE(death);
    std::array<int, 2> ready{};
    REQUIRE(::pipe(ready.data()) == 0);
    const pid_t child = ::fork();
    REQUIRE(child >= 0);
    if (child == 0) store_for_ever(folder.database(), ready[1]);
    ::close(ready[1]);
    // Every fourth dies at any time since its start, while it opens the database; the others while they
    // store.
    char word = '?';
    if (death % 4 != 0) REQUIRE(::read(ready[0], &word, 1) == 1);
    std::this_thread::sleep_for(std::chrono::microseconds(random() % 30000));
    ::close(ready[0]);
    ::kill(child, SIGKILL);
    int status = 0;
    REQUIRE(::waitpid(child, &status, 0) == child);
    REQUIRE(WIFSIGNALED(status));  // it never ended by itself, so nothing was refused

    const std::unique_ptr<Store> store = opened(folder.database());
    std::vector<std::size_t> counts;
    for (const std::string& book : books) {
      const JournalHead head = refolded(*store, book);
      CHECK(value_of(store->head(book)).hash == head.hash);
      LogFilter all;
      all.limit = 1'000'000;
      const std::vector<StoredNight> nights = value_of(store->log(book, all));
      counts.push_back(nights.size());
      // Every "night" of the journal has its row, and the other way round.
      std::size_t entries = 0;
      for (const JournalEntry& entry : value_of(store->entries_after(book, 0, 1'000'000))) {
        if (entry.kind == night_kind) ++entries;
      }
      CHECK(entries == nights.size());
      // The days follow each other without a gap; whole calls only.
      CHECK(nights.size() % 3 == 0);
      for (std::size_t i = 0; i < nights.size(); ++i) {
        CHECK(nights[i].date == first_date.plus_days(static_cast<int>(nights.size() - 1 - i)));
      }
      const auto snapshot = value_of(store->snapshot(book));
      CHECK(snapshot.has_value() == !nights.empty());
      if (snapshot) CHECK(snapshot->date == nights.front().date);
    }
    CHECK(counts[0] == counts[1]);
    CHECK(counts[0] >= nights_before);
    grown += counts[0] > nights_before ? 1 : 0;
    nights_before = counts[0];
  }
  CHECK(grown >= 5);  // it did kill in the middle of work
}

}  // namespace nightweigh::store

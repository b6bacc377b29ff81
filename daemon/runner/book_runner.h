// One book in the runner: its state in memory, and how closes in the store become nights.
//
// The state moves only after the store has committed, so memory and disk never disagree about what
// happened.
#pragma once

#include <memory>
#include <string>
#include <variant>
#include <vector>

#include "daemon/night/night.h"
#include "daemon/runner/book_view.h"
#include "daemon/store/store.h"

namespace nightweigh::runner {

class BookRunner {
 public:
  // Reads the book's journal and last state and writes nothing. Refuses changed settings that a book with
  // nights cannot take (start, instruments, currency).
  static Result<std::unique_ptr<BookRunner>> open(std::shared_ptr<const BookSettings> settings,
                                                  store::Store& store);

  // Appends a `settings` entry where the resolved settings are new or have changed. Called when every book
  // has been opened, so that a refused start leaves no trace.
  Result<void> enter_settings(store::Store& store);

  const BookSettings& settings() const { return *settings_; }
  const std::vector<std::string>& instruments() const { return instruments_; }
  const night::BookState& state() const { return state_; }
  // Why the strategy has to be rebuilt from history, in words; empty if it has not.
  const std::string& rebuild_because() const { return rebuild_because_; }

  // The complete days that come next, at most `most`; and why the day after them is not ready, though there
  // are closes for it or for later days.
  struct Ready {
    std::vector<night::ClosesOfTheDay> days;
    std::vector<std::string> waiting;
  };
  Result<Ready> ready_days(store::Store& store, std::size_t most) const;

  // Nights of these days, computed from the state in memory; touches no store, changes nothing.
  struct Computed {
    std::vector<night::Night> nights;
    std::vector<std::string> waiting;  // why the first day that gave no night did not
    bool needs_history = false;
  };
  Computed compute(const std::vector<night::ClosesOfTheDay>& days, const night::History* history) const;

  // The relatives of all nights after the first, from the journal.
  Result<night::History> history(store::Store& store) const;

  store::NightToStore to_store(const night::Night& night) const;

  // After the commit.
  void advance(const night::Night& last, const store::JournalHead& head);
  void set_waiting(std::vector<std::string> reasons) { waiting_ = std::move(reasons); }
  void set_trouble(std::string trouble) { trouble_ = std::move(trouble); }
  const std::string& trouble() const { return trouble_; }

  BookViewPointer view() const;

 private:
  explicit BookRunner(std::shared_ptr<const BookSettings> settings);
  Result<std::optional<Date>> next_trading_day_with_closes(store::Store& store,
                                                           std::optional<Date> after) const;

  std::shared_ptr<const BookSettings> settings_;
  std::vector<std::string> instruments_;
  night::BookState state_;
  store::JournalHead head_;
  bool settings_are_new_ = false;
  std::string night_bytes_;
  std::string rebuild_because_;
  std::vector<std::string> waiting_;
  std::string trouble_;
};

}  // namespace nightweigh::runner

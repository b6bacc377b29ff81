// The Store on one SQLite connection. Its members stand in files by subject: open.cpp, closes.cpp,
// journal.cpp, nights.cpp.
#pragma once

#include <SQLiteCpp/Database.h>
#include <SQLiteCpp/Statement.h>

#include <string>
#include <vector>

#include "daemon/store/migrations.h"
#include "daemon/store/query.h"
#include "daemon/store/store.h"

namespace nightweigh::store {

// Store::open with another list of migrations than the compiled one.
Result<std::unique_ptr<Store>> open_with(const std::filesystem::path& file, Store::Mode mode,
                                         const std::vector<Migration>& migrations);

// Every statement, prepared once; always used through a Query.
struct Statements {
  explicit Statements(const SQLite::Database& database);

  SQLite::Statement knows_batch, closes_of, insert_batch, insert_close, close_of_day, next_date;
  SQLite::Statement head, insert_entry, newest_entry, entries_after;
  SQLite::Statement newest_night, insert_night, batch_of_close, insert_night_batch, delete_snapshots,
      insert_snapshot, snapshot;
  SQLite::Statement night, log, night_batches, books;
};

class DatabaseStore final : public Store {
 public:
  DatabaseStore(SQLite::Database database, const std::filesystem::path& file, Mode mode);
  ~DatabaseStore() override;

  Result<bool> knows_batch(const std::string& digest) override;
  Result<std::vector<StoredClose>> closes_of(const std::string& instrument, Date date) override;
  Result<void> store_batch(const StoredBatch& batch) override;
  Result<std::vector<std::optional<Close>>> day(const std::vector<std::string>& instruments,
                                                Date date) override;
  Result<std::optional<Date>> next_date_with_closes(const std::vector<std::string>& instruments,
                                                    std::optional<Date> after, Date from) override;

  Result<JournalHead> head(const std::string& book) override;
  Result<JournalHead> append(const std::string& book, const std::string& kind,
                             const std::string& bytes) override;
  Result<std::vector<JournalHead>> store_nights(const std::vector<NightToStore>& nights) override;
  Result<std::optional<Snapshot>> snapshot(const std::string& book) override;
  Result<std::optional<JournalEntry>> newest(const std::string& book, const std::string& kind) override;
  Result<std::vector<JournalEntry>> entries_after(const std::string& book, std::uint64_t sequence,
                                                  std::size_t limit) override;

  Result<std::optional<StoredNight>> night(const std::string& book, Date date) override;
  Result<std::vector<StoredNight>> log(const std::string& book, const LogFilter& filter) override;
  Result<std::vector<std::string>> books() override;

 private:
  // These run inside the caller's transaction and let SQLite's exceptions pass.
  JournalHead read_head(const std::string& book);
  JournalHead add_entry(const std::string& book, const std::string& kind, const std::string& bytes);
  Result<JournalEntry> entry_in(const Query& row, const std::string& book) const;
  Result<JournalHead> add_night(const NightToStore& night);
  void replace_snapshot(const std::string& book, const Snapshot& snapshot);
  Result<Close> close_in(const Query& row, const std::string& instrument, Date date) const;
  Result<StoredNight> night_in(const Query& row, const std::string& book);
  // A stored value that no Store wrote.
  Error damaged(const std::string& what, const std::string& value) const;

  // Members end in reverse order: the statements before their connection.
  SQLite::Database database_;
  Statements statements_;
  std::string file_;
  Mode mode_;
};

}  // namespace nightweigh::store

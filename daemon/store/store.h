// The database: closes, journals, the last state of each book. The only folder that knows SQLite.
//
// One writer thread owns a Store in write mode; readers open their own in read mode (WAL lets them read
// beside the writer). No statement is left open between calls. Every error of SQLite is mapped to an
// Error in one place (busy, full, corrupted, too new, ...).
//
// Invariants kept here:
//   S1  a batch's closes are stored in one transaction, whole or not at all;
//   S2  a journal only grows; entry n+1 names the hash of entry n;
//   S3  a night is stored once: unique (book, date); its journal entry, its row and the book's new state
//       commit together.
#pragma once

#include <cstdint>
#include <filesystem>
#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "daemon/domain/close.h"
#include "daemon/domain/date.h"
#include "daemon/domain/result.h"

namespace nightweigh::store {

// Hash of the empty journal: 64 zeros.
inline const std::string empty_hash(64, '0');

// The kind of a night's journal entry.
inline constexpr const char* night_kind = "night";

// How long a call waits for another connection before it gives up as busy.
inline constexpr int busy_timeout_ms = 2000;

struct JournalHead {
  std::uint64_t sequence = 0;  // 0 = no entry yet
  std::string hash = empty_hash;
};

struct JournalEntry {
  std::uint64_t sequence = 0;  // from 1
  std::string kind;            // "settings", "night", ...
  std::string bytes;           // canonical JSON
  std::string previous_hash;
  std::string hash;
};

// SHA-256 over "nightweigh journal 1\n<book>\n<sequence>\n<kind>\n<previous hash>\n<bytes>", lower-case hex.
std::string entry_hash(const std::string& book, std::uint64_t sequence, const std::string& kind,
                       const std::string& previous_hash, const std::string& bytes);

struct StoredBatch {
  std::string digest;            // SHA-256 of its bytes, lower-case hex
  std::string source;            // "drop: name.csv", "socket", ... for people only
  std::int64_t taken_at_us = 0;  // UTC microseconds
  std::vector<Close> closes;     // only those not yet stored
};

struct StoredClose {
  Close close;
  std::string batch;  // digest
};

// The state a book resumes from: opaque bytes of the night folder.
struct Snapshot {
  Date date;
  std::string desk;         // JSON text: ledger, pending sheet, ...
  std::string strategy;     // bytes
  std::string covariation;  // bytes
};

// What a processed night adds. Its journal entry, of kind "night", follows the book's head as it is then.
struct NightToStore {
  std::string book;
  Date date;            // after every night that the book has
  std::string verdict;  // move | stay | withheld
  std::string bytes;    // canonical JSON of the night: the journal entry's bytes
  Snapshot snapshot;    // of the same date; replaces the book's older one
  // Whose closes of that date the night used (the book's instruments; never empty). The batches that their
  // highest revisions came in are noted beside the night.
  std::vector<std::string> instruments;
};

struct StoredNight {
  Date date;
  std::string verdict;
  std::uint64_t sequence = 0;
  std::string hash;
  std::string bytes;
  std::vector<std::string> batches;  // digests of the batches its closes came in, ascending
};

struct LogFilter {
  std::optional<Date> from, to;
  std::string verdict;         // empty = all
  std::optional<Date> before;  // cursor: strictly older nights
  std::size_t limit = 50;
};

class Store {
 public:
  enum class Mode { write, read };

  // write: creates the file if there is none (whole, or not at all), sets WAL / synchronous=FULL / foreign
  // keys, copies the file to <name>.before-<first version it lacks> and migrates if it is older. Refuses a
  // newer database, a file that is no database, a failed integrity quick_check (a third of a second for 1.5
  // million closes); never deletes or empties a file. The caller holds the directory lock.
  //
  // read: no change to the database; a missing or older one is an Error that says so.
  //
  // Error kinds: not_found, storage, corrupted, busy (after busy_timeout_ms).
  static Result<std::unique_ptr<Store>> open(const std::filesystem::path& file, Mode mode);
  // A Store is used by one thread at a time. In write mode the destructor moves the log (-wal) into the file.
  virtual ~Store() = default;
  Store() = default;
  Store(const Store&) = delete;
  Store& operator=(const Store&) = delete;

  // ---- closes
  virtual Result<bool> knows_batch(const std::string& digest) = 0;
  // Every stored revision of (instrument, date), ascending by revision.
  virtual Result<std::vector<StoredClose>> closes_of(const std::string& instrument, Date date) = 0;
  // The batch and its closes, or nothing. conflict: the batch or one of the closes is stored already.
  virtual Result<void> store_batch(const StoredBatch& batch) = 0;
  // Highest revision a line for that date, in the order of `instruments`; nullopt where there is none.
  virtual Result<std::vector<std::optional<Close>>> day(const std::vector<std::string>& instruments,
                                                        Date date) = 0;
  // The first date after `after` (at or after `from` when after is nullopt) on which any of the
  // instruments has a close; nullopt if none.
  virtual Result<std::optional<Date>> next_date_with_closes(const std::vector<std::string>& instruments,
                                                            std::optional<Date> after, Date from) = 0;

  // ---- journal and nights
  virtual Result<JournalHead> head(const std::string& book) = 0;
  // Appends one entry that is no night (settings, ...). Returns the new head. kind: 1 to 64 of a-z 0-9 _ -,
  // not "night", which store_nights alone writes (bad_input).
  virtual Result<JournalHead> append(const std::string& book, const std::string& kind,
                                     const std::string& bytes) = 0;
  // All in one transaction, in order. Returns the new heads, one for each night. conflict: the book already
  // has that night or a later one.
  virtual Result<std::vector<JournalHead>> store_nights(const std::vector<NightToStore>& nights) = 0;
  // corrupted: its bytes are not what its digest says.
  virtual Result<std::optional<Snapshot>> snapshot(const std::string& book) = 0;
  // The newest entry of a kind, and all entries after a sequence (ascending, at most `limit`). Every entry
  // read here and below is held against its hash (corrupted); the links between them are verify's work.
  virtual Result<std::optional<JournalEntry>> newest(const std::string& book, const std::string& kind) = 0;
  virtual Result<std::vector<JournalEntry>> entries_after(const std::string& book, std::uint64_t sequence,
                                                          std::size_t limit) = 0;

  // ---- reading nights
  virtual Result<std::optional<StoredNight>> night(const std::string& book, Date date) = 0;
  virtual Result<std::vector<StoredNight>> log(const std::string& book,
                                               const LogFilter& filter) = 0;  // newest first
  virtual Result<std::vector<std::string>> books() = 0;                       // that have a journal
};

}  // namespace nightweigh::store

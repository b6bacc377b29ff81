// Opening, creating and closing the database.
#include <SQLiteCpp/Transaction.h>
#include <fcntl.h>
#include <sqlite3.h>
#include <unistd.h>

#include <cerrno>
#include <string>
#include <system_error>

#include "daemon/platform/files.h"
#include "daemon/store/database_store.h"
#include "daemon/store/schema.h"
#include "daemon/store/sqlite_error.h"

namespace nightweigh::store {

namespace {

namespace fs = std::filesystem;

// The smallest page that SQLite knows ("Database File Format", 1.3.2).
constexpr std::uintmax_t bytes_min = 512;

fs::path beside(const fs::path& file, const std::string& suffix) {
  return fs::path(file.string() + suffix);
}

fs::path folder_of(const fs::path& file) {
  return file.has_parent_path() ? file.parent_path() : fs::path(".");
}

// Nothing in a damaged or foreign file may make the connection do more than read and write tables.
void harden(SQLite::Database& database) {
  sqlite3* handle = database.getHandle();
  sqlite3_db_config(handle, SQLITE_DBCONFIG_DEFENSIVE, 1, nullptr);
  sqlite3_db_config(handle, SQLITE_DBCONFIG_TRUSTED_SCHEMA, 0, nullptr);
  sqlite3_db_config(handle, SQLITE_DBCONFIG_DQS_DML, 0, nullptr);
  sqlite3_db_config(handle, SQLITE_DBCONFIG_DQS_DDL, 0, nullptr);
  database.exec("PRAGMA cell_size_check = ON");
}

Result<void> require_right(const fs::path& path, int right, const char* problem) {
  if (::faccessat(AT_FDCWD, path.c_str(), right, AT_EACCESS) != 0) {
    return failure(platform::file_error(path, problem, errno));
  }
  return {};
}

// Asked before SQLite, which silently opens a write-protected file for reading and has no words for a
// folder in which it cannot make its log.
Result<void> require_rights(const fs::path& file, bool writes) {
  if (!writes) return require_right(file, R_OK, "the database cannot be read");
  if (Result<void> right = require_right(file, R_OK | W_OK, "the database cannot be written"); !right)
    return right;
  return require_right(folder_of(file), W_OK | X_OK, "the database's folder cannot be written");
}

// What can be said about the file without SQLite. false: there is none.
Result<bool> look_at(const fs::path& file) {
  std::error_code error;
  const fs::file_status status = fs::status(file, error);
  if (status.type() == fs::file_type::not_found) return false;
  if (error) return failure(platform::file_error(file, "cannot be looked at", error.value()));
  if (!fs::is_regular_file(status)) {
    return failure(Error{ErrorKind::storage, file.string(), "is no regular file", "",
                         "move it away, or name another data_dir in the settings"});
  }
  const std::uintmax_t size = fs::file_size(file, error);
  if (error) return failure(platform::file_error(file, "cannot be looked at", error.value()));
  if (size < bytes_min) {
    // Databases are put in place whole, so this one was cut. SQLite would take it for a new, empty one.
    return failure(Error{ErrorKind::corrupted, file.string(), "is too short for a database",
                         std::to_string(size) + " bytes", restore_remedy});
  }
  return true;
}

// Made under a temporary name and renamed, so that a crash never leaves half a database.
Result<void> create(const fs::path& file, const std::vector<Migration>& migrations) {
  std::error_code error;
  const fs::path log = beside(file, "-wal");
  if (const std::uintmax_t log_bytes = fs::file_size(log, error); !error && log_bytes > 0) {
    // Its pages would be taken for those of the new database.
    return failure(Error{
        ErrorKind::corrupted, file.string(), "the database is missing but its log is there",
        log.filename().string(),
        "put the database back beside its log, or restore a backup; to start empty, move the log away"});
  }
  if (!fs::is_directory(folder_of(file), error)) {
    return failure(Error{ErrorKind::not_found, folder_of(file).string(),
                         "the database's folder does not exist", "",
                         "make the folder, or name another data_dir in the settings"});
  }
  if (Result<void> right =
          require_right(folder_of(file), W_OK | X_OK, "no database can be made in this folder");
      !right) {
    return right;
  }
  const fs::path temporary =
      folder_of(file) / std::string(".").append(file.filename().string()).append(".new");
  for (const char* suffix : {"", "-journal", "-wal", "-shm"}) fs::remove(beside(temporary, suffix), error);
  Result<void> made = guarded(file.string(), [&]() -> Result<void> {
    SQLite::Database database(temporary, SQLite::OPEN_READWRITE | SQLite::OPEN_CREATE | SQLite::OPEN_NOMUTEX,
                              busy_timeout_ms);
    harden(database);
    database.exec("PRAGMA synchronous = FULL");
    return migrate(database, file, 0, migrations);
  });
  if (made) made = platform::rename_durably(temporary, file);
  if (!made) fs::remove(temporary, error);
  return made;
}

Result<void> prepare_for_writing(SQLite::Database& database, const fs::path& file, int version,
                                 const std::vector<Migration>& migrations) {
  if (Result<void> checked = check_damage(database, file); !checked) return checked;
  if (version < newest_version(migrations)) {
    // Named by the first step, so that a migration cut off half way keeps the copy of its start.
    const fs::path copy = beside(file, ".before-" + std::to_string(version + 1));
    if (Result<void> copied = copy_database(database, file, copy); !copied) return copied;
    database.exec("PRAGMA synchronous = FULL");
    if (Result<void> migrated = migrate(database, file, version, migrations); !migrated) return migrated;
  }
  const std::string mode = database.execAndGet("PRAGMA journal_mode = WAL").getString();
  if (mode != "wal") {
    return failure(Error{ErrorKind::storage, file.string(), "the database's log could not be switched to WAL",
                         mode, "keep data_dir on a local disk; WAL does not work on network file systems"});
  }
  database.exec("PRAGMA synchronous = FULL");
  database.exec("PRAGMA foreign_keys = ON");
  database.exec("PRAGMA journal_size_limit = 16777216");
  // Take the write lock once: a writer that hangs elsewhere shows now, not at the first batch.
  SQLite::Transaction probe(database, SQLite::TransactionBehavior::IMMEDIATE);
  probe.commit();
  return {};
}

Result<void> prepare_for_reading(const fs::path& file, int version,
                                 const std::vector<Migration>& migrations) {
  if (version == newest_version(migrations)) return {};
  return failure(Error{ErrorKind::storage, file.string(),
                       "the database has schema version " + std::to_string(version) +
                           ", older than version " + std::to_string(newest_version(migrations)) +
                           " of this program",
                       "", "start the service once: it keeps a copy and brings the database up to date"});
}

}  // namespace

Result<std::unique_ptr<Store>> open_with(const fs::path& file, Store::Mode mode,
                                         const std::vector<Migration>& migrations) {
  using Opened = Result<std::unique_ptr<Store>>;
  const bool writes = mode == Store::Mode::write;
  const Result<bool> exists = look_at(file);
  if (!exists) return failure(exists.error());
  if (!*exists) {
    if (!writes) {
      return failure(Error{ErrorKind::not_found, file.string(), "there is no database", "",
                           "start the service once, or check data_dir in the settings"});
    }
    if (Result<void> created = create(file, migrations); !created) return failure(created.error());
  }
  if (Result<void> rights = require_rights(file, writes); !rights) return failure(rights.error());
  return guarded(file.string(), [&]() -> Opened {
    SQLite::Database database(
        file, (writes ? SQLite::OPEN_READWRITE : SQLite::OPEN_READONLY) | SQLite::OPEN_NOMUTEX,
        busy_timeout_ms);
    harden(database);
    const Result<int> version = version_of(database, file, migrations);
    if (!version) return failure(version.error());
    const Result<void> prepared = writes ? prepare_for_writing(database, file, *version, migrations)
                                         : prepare_for_reading(file, *version, migrations);
    if (!prepared) return failure(prepared.error());
    return std::make_unique<DatabaseStore>(std::move(database), file, mode);
  });
}

Result<std::unique_ptr<Store>> Store::open(const fs::path& file, Mode mode) {
  return open_with(file, mode, compiled_migrations());
}

DatabaseStore::DatabaseStore(SQLite::Database database, const fs::path& file, Mode mode)
    : database_(std::move(database)), statements_(database_), file_(file.string()), mode_(mode) {}

DatabaseStore::~DatabaseStore() {
  // Readers in the middle of a call make this give up after busy_timeout_ms; the log then stays beside
  // the file, and nothing is lost.
  if (mode_ == Mode::write) database_.tryExec("PRAGMA wal_checkpoint(TRUNCATE)");
}

Error DatabaseStore::damaged(const std::string& what, const std::string& value) const {
  return {ErrorKind::corrupted, file_ + ", " + what, "stored bytes are not what was written", shown(value),
          restore_remedy};
}

Statements::Statements(const SQLite::Database& db)
    : knows_batch(db, "SELECT 1 FROM batches WHERE digest = ?1"),
      closes_of(
          db,
          "SELECT revision, close, dividend, split, batch FROM closes WHERE instrument = ?1 AND date = ?2 "
          "ORDER BY revision"),
      insert_batch(db, "INSERT INTO batches (digest, source, taken_at_us, rows) VALUES (?1, ?2, ?3, ?4)"),
      insert_close(db,
                   "INSERT INTO closes (instrument, date, revision, close, dividend, split, batch) "
                   "VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7)"),
      close_of_day(
          db,
          "SELECT revision, close, dividend, split, batch FROM closes WHERE instrument = ?1 AND date = ?2 "
          "ORDER BY revision DESC LIMIT 1"),
      next_date(db, "SELECT date FROM closes WHERE instrument = ?1 AND date >= ?2 ORDER BY date LIMIT 1"),
      head(db, "SELECT seq, hash FROM journal WHERE book = ?1 ORDER BY seq DESC LIMIT 1"),
      insert_entry(db,
                   "INSERT INTO journal (book, seq, kind, bytes, previous_hash, hash) VALUES (?1, ?2, ?3, "
                   "?4, ?5, ?6)"),
      newest_entry(db,
                   "SELECT seq, kind, bytes, previous_hash, hash FROM journal WHERE book = ?1 AND kind = ?2 "
                   "ORDER BY seq DESC LIMIT 1"),
      entries_after(db,
                    "SELECT seq, kind, bytes, previous_hash, hash FROM journal WHERE book = ?1 AND seq > ?2 "
                    "ORDER BY seq LIMIT ?3"),
      newest_night(db, "SELECT date FROM nights WHERE book = ?1 ORDER BY date DESC LIMIT 1"),
      insert_night(db, "INSERT INTO nights (book, date, seq, verdict) VALUES (?1, ?2, ?3, ?4)"),
      batch_of_close(
          db, "SELECT batch FROM closes WHERE instrument = ?1 AND date = ?2 ORDER BY revision DESC LIMIT 1"),
      insert_night_batch(db, "INSERT INTO night_batches (book, date, batch) VALUES (?1, ?2, ?3)"),
      delete_snapshots(db, "DELETE FROM snapshots WHERE book = ?1"),
      insert_snapshot(db,
                      "INSERT INTO snapshots (book, date, desk, strategy, covariation, sha256) "
                      "VALUES (?1, ?2, ?3, ?4, ?5, ?6)"),
      snapshot(db,
               "SELECT date, desk, strategy, covariation, sha256 FROM snapshots WHERE book = ?1 "
               "ORDER BY date DESC LIMIT 1"),
      night(db,
            "SELECT n.date, n.verdict, j.seq, j.kind, j.bytes, j.previous_hash, j.hash FROM nights n "
            "JOIN journal j ON j.book = n.book AND j.seq = n.seq WHERE n.book = ?1 AND n.date = ?2"),
      log(db,
          "SELECT n.date, n.verdict, j.seq, j.kind, j.bytes, j.previous_hash, j.hash FROM nights n "
          "JOIN journal j ON j.book = n.book AND j.seq = n.seq "
          "WHERE n.book = ?1 AND n.date >= ?2 AND n.date <= ?3 AND (?4 = '' OR n.verdict = ?4) "
          "ORDER BY n.date DESC LIMIT ?5"),
      night_batches(db, "SELECT batch FROM night_batches WHERE book = ?1 AND date = ?2 ORDER BY batch"),
      books(db, "SELECT DISTINCT book FROM journal ORDER BY book") {}

}  // namespace nightweigh::store

#include "daemon/store/schema.h"

#include <SQLiteCpp/Statement.h>
#include <SQLiteCpp/Transaction.h>
#include <sqlite3.h>

#include <charconv>
#include <chrono>
#include <stdexcept>
#include <string>
#include <system_error>

#include "daemon/platform/files.h"
#include "daemon/store/query.h"
#include "daemon/store/sqlite_error.h"
#include "strategies/digest/sha256.h"

namespace nightweigh::store {

namespace {

constexpr const char* ledger_sql = R"(
CREATE TABLE schema_migrations (
  version        INTEGER NOT NULL PRIMARY KEY CHECK (version > 0),
  name           TEXT    NOT NULL,
  sha256         TEXT    NOT NULL CHECK (length(sha256) = 64),
  applied_at_us  INTEGER NOT NULL
) STRICT;)";

std::int64_t now_us() {
  return std::chrono::duration_cast<std::chrono::microseconds>(
             std::chrono::system_clock::now().time_since_epoch())
      .count();
}

int version_in_name(const std::string& name) {
  int version = 0;
  const char* end = name.data() + name.size();
  const auto [rest, error] = std::from_chars(name.data(), end, version);
  const bool well_formed = error == std::errc() && rest == name.data() + 4 && rest != end && *rest == '_';
  return well_formed ? version : 0;
}

Error error_at(const std::filesystem::path& file, ErrorKind kind, std::string problem, std::string value,
               std::string remedy) {
  return {kind, file.string(), std::move(problem), std::move(value), std::move(remedy)};
}

// The ledger's rows must be the first `version` migrations, text for text.
Result<void> check_ledger(SQLite::Database& database, const std::filesystem::path& file, int version,
                          const std::vector<Migration>& migrations) {
  SQLite::Statement statement(database,
                              "SELECT version, name, sha256 FROM schema_migrations ORDER BY version");
  Query rows(statement);
  int expected = 0;
  while (rows.next()) {
    ++expected;
    if (rows.number(0) != expected || expected > version) {
      return failure(error_at(file, ErrorKind::corrupted,
                              "schema_migrations and user_version do not agree about the database's version",
                              rows.bytes(1), restore_remedy));
    }
    const Migration& ours = migrations[static_cast<std::size_t>(expected) - 1];
    if (rows.bytes(2) != sha256_hex(ours.sql)) {
      return failure(error_at(
          file, ErrorKind::storage,
          "a migration was applied to this database with another text than this program has", rows.bytes(1),
          "use the nightweigh program that made the database, or a release after it"));
    }
  }
  if (expected != version) {
    return failure(error_at(file, ErrorKind::corrupted,
                            "schema_migrations and user_version do not agree about the database's version",
                            std::to_string(version), restore_remedy));
  }
  return {};
}

// One migration, its ledger row and the version, in one transaction.
Result<void> apply(SQLite::Database& database, const std::filesystem::path& file, int version,
                   const Migration& migration) {
  SQLite::Transaction transaction(database, SQLite::TransactionBehavior::IMMEDIATE);
  if (version == 1) {
    database.exec(ledger_sql);
    database.exec("PRAGMA application_id = " + std::to_string(application_id));
  }
  database.exec(migration.sql);
  if (sqlite3_get_autocommit(database.getHandle()) != 0) {
    throw std::logic_error("migration " + migration.name + " must not end its transaction");
  }
  {
    // Foreign keys are not enforced while tables are rebuilt; here they are all looked at.
    SQLite::Statement statement(database, "PRAGMA foreign_key_check");
    Query broken(statement);
    if (broken.next()) {
      return failure(
          error_at(file, ErrorKind::corrupted,
                   "after migration " + migration.name + " a row would refer to nothing; it was undone",
                   broken.bytes(0), "restore a backup, or keep using the program that wrote this database"));
    }
  }
  SQLite::Statement statement(database, "INSERT INTO schema_migrations VALUES (?1, ?2, ?3, ?4)");
  Query(statement, std::int64_t{version}, migration.name, sha256_hex(migration.sql), now_us()).run();
  database.exec("PRAGMA user_version = " + std::to_string(version));
  transaction.commit();
  return {};
}

// SQLite reads missing bytes of the last page as zeros; only while a log is there may the last page be
// half written, as the log still has it.
Result<void> check_length(SQLite::Database& database, const std::filesystem::path& file) {
  std::error_code error;
  const std::uintmax_t log_bytes = std::filesystem::file_size(file.string() + "-wal", error);
  if (!error && log_bytes > 0) return {};
  const std::uintmax_t bytes = std::filesystem::file_size(file, error);
  if (error) return failure(platform::file_error(file, "cannot be looked at", error.value()));
  const auto page_bytes = static_cast<std::uintmax_t>(database.execAndGet("PRAGMA page_size").getInt64());
  if (bytes % page_bytes == 0) return {};
  return failure(error_at(file, ErrorKind::corrupted, "the database's last page is cut",
                          std::to_string(bytes) + " bytes", restore_remedy));
}

}  // namespace

int newest_version(const std::vector<Migration>& migrations) {
  int expected = 0;
  for (const Migration& migration : migrations) {
    if (version_in_name(migration.name) != ++expected) {
      throw std::logic_error("migrations are not numbered without a gap: " + migration.name);
    }
  }
  return expected;
}

Result<int> version_of(SQLite::Database& database, const std::filesystem::path& file,
                       const std::vector<Migration>& migrations) {
  return guarded(file.string(), [&]() -> Result<int> {
    const int newest = newest_version(migrations);
    const int id = database.execAndGet("PRAGMA application_id").getInt();
    const int version = database.execAndGet("PRAGMA user_version").getInt();
    if (id != application_id || version < 1) {
      return failure(error_at(file, ErrorKind::storage,
                              "is a database of another program; it was not touched", "",
                              "check data_dir in the settings"));
    }
    if (version > newest) {
      return failure(error_at(
          file, ErrorKind::storage,
          "the database has schema version " + std::to_string(version) +
              ", this program knows versions up to " + std::to_string(newest) + "; it was not touched",
          "",
          "use the nightweigh release that wrote the database, or a later one (it must know "
          "schema version " +
              std::to_string(version) + ")"));
    }
    if (Result<void> ledger = check_ledger(database, file, version, migrations); !ledger) {
      return failure(ledger.error());
    }
    return version;
  });
}

Result<void> migrate(SQLite::Database& database, const std::filesystem::path& file, int version,
                     const std::vector<Migration>& migrations) {
  const int newest = newest_version(migrations);
  for (int next = version + 1; next <= newest; ++next) {
    const Migration& migration = migrations[static_cast<std::size_t>(next) - 1];
    Result<void> applied = guarded(file.string() + ", migration " + migration.name, [&] {
      database.exec("PRAGMA foreign_keys = OFF");  // as SQLite advises for rebuilding tables; see apply()
      return apply(database, file, next, migration);
    });
    if (!applied) return applied;
  }
  return {};
}

Result<void> copy_database(SQLite::Database& database, const std::filesystem::path& file,
                           const std::filesystem::path& target) {
  std::filesystem::path temporary = target;
  temporary.replace_filename(std::string(".").append(target.filename().string()).append(".tmp"));
  std::error_code ignored;
  std::filesystem::remove(temporary, ignored);  // of a copy that was cut off; VACUUM INTO wants no file there
  Result<void> copied = guarded(temporary.string(), [&]() -> Result<void> {
    {
      SQLite::Statement statement(database, "VACUUM INTO ?1");
      Query(statement, temporary.string()).run();
    }
    SQLite::Database copy(temporary, SQLite::OPEN_READONLY | SQLite::OPEN_NOMUTEX);
    return check_damage(copy, temporary);
  });
  if (copied) copied = platform::rename_durably(temporary, target);
  if (!copied) {
    std::filesystem::remove(temporary, ignored);
    Error error = copied.error();
    error.place = file.string();
    error.problem = "the copy " + target.filename().string() + " could not be made: " + error.problem;
    return failure(std::move(error));
  }
  return {};
}

Result<void> check_damage(SQLite::Database& database, const std::filesystem::path& file) {
  return guarded(file.string(), [&]() -> Result<void> {
    if (Result<void> whole = check_length(database, file); !whole) return whole;
    database.exec("PRAGMA ignore_check_constraints = ON");
    std::string answer;
    {
      SQLite::Statement statement(database, "PRAGMA quick_check(1)");
      Query row(statement);
      if (row.next()) answer = row.bytes(0);
    }
    database.exec("PRAGMA ignore_check_constraints = OFF");
    if (answer != "ok") {
      return failure(
          error_at(file, ErrorKind::corrupted, "the database is damaged", shown(answer, 200),
                   "stop the service, keep the damaged file aside, and restore a backup in its place"));
    }
    return {};
  });
}

}  // namespace nightweigh::store

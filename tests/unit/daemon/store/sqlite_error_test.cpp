// Which Error a code of SQLite becomes. The codes and their meaning: SQLite's "Result and Error Codes".
#include <SQLiteCpp/Database.h>
#include <doctest/doctest.h>
#include <sqlite3.h>

#include "daemon/store/sqlite_error.h"

namespace nightweigh::store {

TEST_CASE("codes of SQLite and kinds of errors") {
  struct Row {
    int code;
    ErrorKind kind;
  };
  for (const Row row :
       {Row{SQLITE_BUSY, ErrorKind::busy}, Row{SQLITE_LOCKED, ErrorKind::busy},
        Row{SQLITE_BUSY_SNAPSHOT, ErrorKind::busy}, Row{SQLITE_PROTOCOL, ErrorKind::busy},
        Row{SQLITE_FULL, ErrorKind::storage}, Row{SQLITE_IOERR, ErrorKind::storage},
        Row{SQLITE_IOERR_FSYNC, ErrorKind::storage}, Row{SQLITE_READONLY, ErrorKind::storage},
        Row{SQLITE_CANTOPEN, ErrorKind::storage}, Row{SQLITE_PERM, ErrorKind::storage},
        Row{SQLITE_CORRUPT, ErrorKind::corrupted}, Row{SQLITE_NOTADB, ErrorKind::corrupted},
        Row{SQLITE_CONSTRAINT, ErrorKind::bad_input}, Row{SQLITE_MISMATCH, ErrorKind::bad_input},
        Row{SQLITE_TOOBIG, ErrorKind::limit}, Row{SQLITE_ERROR, ErrorKind::storage},
        Row{SQLITE_MISUSE, ErrorKind::storage}, Row{-1, ErrorKind::storage}}) {
    CAPTURE(row.code);
    const Error error = error_of(SQLite::Exception("its own words", row.code), "var/nightweigh.db");
    CHECK(error.kind == row.kind);
    CHECK(error.place == "var/nightweigh.db");
    CHECK(error.value == "its own words");
    CHECK_FALSE(error.problem.empty());
    CHECK_FALSE(error.remedy.empty());
  }
}

TEST_CASE("constraints of uniqueness are conflicts, constraints of form bad input") {
  SQLite::Database database(":memory:", SQLite::OPEN_READWRITE | SQLite::OPEN_CREATE);
  database.exec(
      "PRAGMA foreign_keys = ON;"
      "CREATE TABLE a (x TEXT PRIMARY KEY CHECK (x <> 'no')) STRICT;"
      "CREATE TABLE b (x TEXT NOT NULL UNIQUE, y TEXT REFERENCES a (x), n INTEGER) STRICT;"
      "CREATE TRIGGER keep BEFORE DELETE ON a BEGIN SELECT RAISE(ABORT, 'only grows'); END;"
      "INSERT INTO a VALUES ('yes'); INSERT INTO b VALUES ('one', NULL, 1);");
  const auto kind_of = [&](const char* sql) {
    const Result<void> result = guarded("memory", [&]() -> Result<void> {
      database.exec(sql);
      return {};
    });
    REQUIRE_FALSE(result);
    return result.error().kind;
  };
  CHECK(kind_of("INSERT INTO a VALUES ('yes')") == ErrorKind::conflict);
  CHECK(kind_of("INSERT INTO b VALUES ('one', NULL, 1)") == ErrorKind::conflict);
  CHECK(kind_of("DELETE FROM a") == ErrorKind::conflict);
  CHECK(kind_of("INSERT INTO a VALUES ('no')") == ErrorKind::bad_input);
  CHECK(kind_of("INSERT INTO b VALUES (NULL, NULL, 1)") == ErrorKind::bad_input);
  CHECK(kind_of("INSERT INTO b VALUES ('two', 'none', 1)") == ErrorKind::bad_input);
  CHECK(kind_of("INSERT INTO b VALUES ('two', NULL, 'text')") == ErrorKind::bad_input);
}

}  // namespace nightweigh::store

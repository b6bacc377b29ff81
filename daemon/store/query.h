// One use of a prepared statement: binds, steps, reads; the destructor resets it, so that no statement
// (and no read transaction behind it) outlives the call, also when an exception passes.
#pragma once

#include <SQLiteCpp/Database.h>
#include <SQLiteCpp/Statement.h>
#include <sqlite3.h>

#include <cstddef>
#include <cstdint>
#include <optional>
#include <string>

namespace nightweigh::store {

// Bytes that go into a BLOB column.
struct Blob {
  const std::string& bytes;
};

class Query {
 public:
  // Values are bound to ?1, ?2, ... in order and copied by SQLite.
  template <class... Values>
  explicit Query(SQLite::Statement& statement, const Values&... values) : statement_(statement) {
    try {
      int index = 0;
      (bind(++index, values), ...);
    } catch (...) {
      finish();  // a destructor does not run for a constructor that throws
      throw;
    }
  }
  ~Query() { finish(); }
  Query(const Query&) = delete;
  Query& operator=(const Query&) = delete;

  // Steps to the next row; false when there is none.
  bool next() { return statement_.executeStep(); }
  // For a statement that gives no rows.
  void run() { statement_.exec(); }

  // Columns of the row, from 0. TEXT or BLOB bytes as they are, NUL included.
  std::string bytes(int column) const {
    const SQLite::Column value = statement_.getColumn(column);
    const char* data = static_cast<const char*>(value.getBlob());
    const int size = value.getBytes();
    return size > 0 ? std::string(data, static_cast<std::size_t>(size)) : std::string();
  }
  std::int64_t number(int column) const { return statement_.getColumn(column).getInt64(); }
  bool is_null(int column) const { return statement_.isColumnNull(column); }

 private:
  static int size_of(const std::string& bytes) {
    // SQLite counts bytes in an int.
    if (bytes.size() > 1'000'000'000) throw SQLite::Exception("string or blob too big", SQLITE_TOOBIG);
    return static_cast<int>(bytes.size());
  }
  void bind(int index, std::int64_t value) { statement_.bind(index, value); }
  void bind(int index, const Blob& value) {
    statement_.bind(index, value.bytes.data(), size_of(value.bytes));
  }
  void bind(int index, const std::string& value) {
    size_of(value);
    statement_.bind(index, value);
  }
  void bind(int index, const std::optional<std::string>& value) {
    if (value) {
      bind(index, *value);
    } else {
      statement_.bind(index);
    }
  }
  void finish() noexcept {
    statement_.tryReset();
    try {
      statement_.clearBindings();  // gives the copies back
    } catch (const SQLite::Exception&) {
      // Bindings are always cleared in full before their next use; keeping them only costs memory.
    }
  }

  SQLite::Statement& statement_;
};

}  // namespace nightweigh::store

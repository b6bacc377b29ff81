// What SQLite throws becomes an Error here, and nowhere else.
#pragma once

#include <SQLiteCpp/Exception.h>

#include <string>
#include <utility>

#include "daemon/domain/result.h"

namespace nightweigh::store {

// What to do about a damaged database.
inline constexpr const char* restore_remedy =
    "stop the service, keep the damaged file aside, and restore a backup in its place";

// place: the database file. The kinds:
//   busy       BUSY, LOCKED, PROTOCOL: another connection holds it
//   storage    FULL, IOERR, READONLY, CANTOPEN, PERM, AUTH: the disk or its rights said no
//   corrupted  CORRUPT, NOTADB, FORMAT: the file is damaged or is no database
//   conflict   CONSTRAINT of uniqueness or of an append-only table: contradicts what is stored
//   bad_input  CONSTRAINT of a value's form, MISMATCH
//   limit      TOOBIG
// Everything else (misuse, a missing table, ...) is storage with SQLite's own words.
Error error_of(const SQLite::Exception& exception, const std::string& place);

// Runs work() -> Result<T> and turns what SQLite throws into that result's Error.
template <class Work>
auto guarded(const std::string& place, Work&& work) -> decltype(work()) {
  try {
    return std::forward<Work>(work)();
  } catch (const SQLite::Exception& exception) {
    return failure(error_of(exception, place));
  }
}

}  // namespace nightweigh::store

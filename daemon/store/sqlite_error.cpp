#include "daemon/store/sqlite_error.h"

#include <sqlite3.h>

namespace nightweigh::store {

namespace {

ErrorKind kind_of_constraint(int extended) {
  switch (extended) {
    case SQLITE_CONSTRAINT_UNIQUE:
    case SQLITE_CONSTRAINT_PRIMARYKEY:
    case SQLITE_CONSTRAINT_ROWID:
    case SQLITE_CONSTRAINT_TRIGGER:  // the append-only rules
      return ErrorKind::conflict;
    default:
      return ErrorKind::bad_input;
  }
}

}  // namespace

Error error_of(const SQLite::Exception& exception, const std::string& place) {
  Error error;
  error.place = place;
  error.value = shown(exception.what(), 200);
  const int extended = exception.getExtendedErrorCode();
  switch (exception.getErrorCode() & 0xff) {
    case SQLITE_BUSY:
    case SQLITE_LOCKED:
    case SQLITE_PROTOCOL:
      error.kind = ErrorKind::busy;
      error.problem = "the database is held by another process or connection";
      error.remedy = "stop the other program that has the file open, then try again";
      break;
    case SQLITE_FULL:
      error.kind = ErrorKind::storage;
      error.problem = "the disk is full; nothing of this step was stored";
      error.remedy = "free space on the file's disk, then try again";
      break;
    case SQLITE_IOERR:
      error.kind = ErrorKind::storage;
      error.problem = "reading or writing the database failed; nothing of this step was stored";
      error.remedy = "check the disk (free space, size limits, the system's log), then try again";
      break;
    case SQLITE_READONLY:
      error.kind = ErrorKind::storage;
      error.problem = "the database cannot be written";
      error.remedy = "give the service's user the right to write the file and its folder";
      break;
    case SQLITE_CANTOPEN:
    case SQLITE_PERM:
    case SQLITE_AUTH:
      error.kind = ErrorKind::storage;
      error.problem = "the database cannot be opened";
      error.remedy =
          "check that the folder exists and that the service's user may read and write the file and its "
          "folder";
      break;
    case SQLITE_CORRUPT:
      error.kind = ErrorKind::corrupted;
      error.problem = "the database is damaged";
      error.remedy = restore_remedy;
      break;
    case SQLITE_NOTADB:
    case SQLITE_FORMAT:
      error.kind = ErrorKind::corrupted;
      error.problem = "the file is no database, or its beginning is damaged";
      error.remedy =
          "check data_dir in the settings; if it is right, keep the file aside and restore a backup in its "
          "place";
      break;
    case SQLITE_CONSTRAINT:
      error.kind = kind_of_constraint(extended);
      error.problem = error.kind == ErrorKind::conflict
                          ? "contradicts what is already stored"
                          : "a value does not have the form that the database asks for";
      error.remedy = "nothing of this step was stored; compare it with what is stored";
      break;
    case SQLITE_MISMATCH:
      error.kind = ErrorKind::bad_input;
      error.problem = "a value does not have the form that the database asks for";
      error.remedy = "nothing of this step was stored; mend the value";
      break;
    case SQLITE_TOOBIG:
      error.kind = ErrorKind::limit;
      error.problem = "a text or blob is larger than the database takes";
      error.remedy = "nothing of this step was stored; make it smaller than 1 GB";
      break;
    default:
      error.kind = ErrorKind::storage;
      error.problem = "the database refused a step";
      error.remedy = "see the text in quotes; `nightweigh inspect` checks the database as a whole";
      break;
  }
  return error;
}

}  // namespace nightweigh::store

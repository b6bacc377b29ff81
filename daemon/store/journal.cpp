// The hash-chained journal of each book.
#include <SQLiteCpp/Transaction.h>

#include <algorithm>
#include <limits>

#include "daemon/store/database_store.h"
#include "daemon/store/sqlite_error.h"
#include "strategies/digest/sha256.h"

namespace nightweigh::store {

std::string entry_hash(const std::string& book, std::uint64_t sequence, const std::string& kind,
                       const std::string& previous_hash, const std::string& bytes) {
  std::string text = "nightweigh journal 1\n";
  text.reserve(text.size() + book.size() + kind.size() + previous_hash.size() + bytes.size() + 32);
  text.append(book).append("\n").append(std::to_string(sequence)).append("\n").append(kind).append("\n");
  text.append(previous_hash).append("\n").append(bytes);
  return sha256_hex(text);
}

JournalHead DatabaseStore::read_head(const std::string& book) {
  Query row(statements_.head, book);
  if (!row.next()) return {};
  return {static_cast<std::uint64_t>(row.number(0)), row.bytes(1)};
}

JournalHead DatabaseStore::add_entry(const std::string& book, const std::string& kind,
                                     const std::string& bytes) {
  const JournalHead before = read_head(book);
  JournalHead after;
  after.sequence = before.sequence + 1;
  after.hash = entry_hash(book, after.sequence, kind, before.hash, bytes);
  Query(statements_.insert_entry, book, static_cast<std::int64_t>(after.sequence), kind, bytes, before.hash,
        after.hash)
      .run();
  return after;
}

// Columns: seq, kind, bytes, previous_hash, hash.
Result<JournalEntry> DatabaseStore::entry_in(const Query& row, const std::string& book) const {
  JournalEntry entry{static_cast<std::uint64_t>(row.number(0)), row.bytes(1), row.bytes(2), row.bytes(3),
                     row.bytes(4)};
  if (entry.hash != entry_hash(book, entry.sequence, entry.kind, entry.previous_hash, entry.bytes)) {
    return failure(damaged("journal of " + book + ", entry " + std::to_string(entry.sequence), entry.bytes));
  }
  return entry;
}

Result<JournalHead> DatabaseStore::head(const std::string& book) {
  return guarded(file_, [&]() -> Result<JournalHead> { return read_head(book); });
}

Result<JournalHead> DatabaseStore::append(const std::string& book, const std::string& kind,
                                          const std::string& bytes) {
  if (kind == night_kind) {
    return failure(Error{ErrorKind::bad_input, file_ + ", journal of " + shown(book),
                         "an entry of this kind needs its night", kind, "store it as a night"});
  }
  return guarded(file_ + ", journal of " + shown(book), [&]() -> Result<JournalHead> {
    SQLite::Transaction transaction(database_, SQLite::TransactionBehavior::IMMEDIATE);
    JournalHead head = add_entry(book, kind, bytes);
    transaction.commit();
    return head;
  });
}

Result<std::optional<JournalEntry>> DatabaseStore::newest(const std::string& book, const std::string& kind) {
  return guarded(file_, [&]() -> Result<std::optional<JournalEntry>> {
    Query row(statements_.newest_entry, book, kind);
    if (!row.next()) return std::nullopt;
    Result<JournalEntry> entry = entry_in(row, book);
    if (!entry) return failure(entry.error());
    return std::move(*entry);
  });
}

Result<std::vector<JournalEntry>> DatabaseStore::entries_after(const std::string& book,
                                                               std::uint64_t sequence, std::size_t limit) {
  return guarded(file_, [&]() -> Result<std::vector<JournalEntry>> {
    constexpr std::uint64_t largest = std::numeric_limits<std::int64_t>::max();
    std::vector<JournalEntry> entries;
    Query rows(statements_.entries_after, book, static_cast<std::int64_t>(std::min(sequence, largest)),
               static_cast<std::int64_t>(std::min<std::uint64_t>(limit, largest)));
    while (rows.next()) {
      Result<JournalEntry> entry = entry_in(rows, book);
      if (!entry) return failure(entry.error());
      entries.push_back(std::move(*entry));
    }
    return entries;
  });
}

Result<std::vector<std::string>> DatabaseStore::books() {
  return guarded(file_, [&]() -> Result<std::vector<std::string>> {
    std::vector<std::string> names;
    Query rows(statements_.books);
    while (rows.next()) names.push_back(rows.bytes(0));
    return names;
  });
}

}  // namespace nightweigh::store

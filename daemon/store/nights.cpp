// Nights and the state that a book resumes from.
#include <SQLiteCpp/Transaction.h>

#include <algorithm>
#include <limits>
#include <map>
#include <set>

#include "daemon/store/database_store.h"
#include "daemon/store/sqlite_error.h"
#include "strategies/digest/sha256.h"

namespace nightweigh::store {

namespace {

// Over every column of the row; the lengths keep bytes from moving from one column to the next.
std::string snapshot_digest(const std::string& book, const Snapshot& snapshot) {
  std::string text = "nightweigh snapshot 1\n";
  text.append(book).append("\n").append(snapshot.date.to_string()).append("\n");
  for (const std::string* part : {&snapshot.desk, &snapshot.strategy, &snapshot.covariation}) {
    text.append(std::to_string(part->size())).append("\n");
  }
  for (const std::string* part : {&snapshot.desk, &snapshot.strategy, &snapshot.covariation})
    text.append(*part);
  return sha256_hex(text);
}

}  // namespace

Result<JournalHead> DatabaseStore::add_night(const NightToStore& night) {
  const std::string place = file_ + ", night of " + shown(night.book) + " on " + night.date.to_string();
  const std::string date = night.date.to_string();
  const auto refuse = [&](ErrorKind kind, std::string problem, std::string value, std::string remedy) {
    return failure(Error{kind, place, std::move(problem), std::move(value), std::move(remedy)});
  };
  if (night.instruments.empty()) {
    return refuse(ErrorKind::bad_input, "names no instruments", "",
                  "name the instruments whose closes it used");
  }
  if (night.snapshot.date != night.date) {
    return refuse(ErrorKind::bad_input, "its snapshot has another date", night.snapshot.date.to_string(),
                  "give the state after this night");
  }
  {
    Query newest(statements_.newest_night, night.book);
    if (newest.next() && date <= newest.bytes(0)) {
      return refuse(ErrorKind::conflict, "the book already has this night or a later one", newest.bytes(0),
                    "a night is stored once, in the order of dates; nothing of this step was stored");
    }
  }
  return guarded(place, [&]() -> Result<JournalHead> {
    JournalHead head = add_entry(night.book, night_kind, night.bytes);
    Query(statements_.insert_night, night.book, date, static_cast<std::int64_t>(head.sequence), night.verdict)
        .run();
    std::set<std::string> batches;
    for (const std::string& instrument : night.instruments) {
      Query batch(statements_.batch_of_close, instrument, date);
      if (batch.next()) batches.insert(batch.bytes(0));
    }
    for (const std::string& batch : batches)
      Query(statements_.insert_night_batch, night.book, date, batch).run();
    return head;
  });
}

void DatabaseStore::replace_snapshot(const std::string& book, const Snapshot& snapshot) {
  Query(statements_.delete_snapshots, book).run();
  Query(statements_.insert_snapshot, book, snapshot.date.to_string(), snapshot.desk, Blob{snapshot.strategy},
        Blob{snapshot.covariation}, snapshot_digest(book, snapshot))
      .run();
}

Result<std::vector<JournalHead>> DatabaseStore::store_nights(const std::vector<NightToStore>& nights) {
  return guarded(file_, [&]() -> Result<std::vector<JournalHead>> {
    std::vector<JournalHead> heads;
    if (nights.empty()) return heads;
    heads.reserve(nights.size());
    std::map<std::string, const Snapshot*> last;  // only a book's last state is worth writing
    SQLite::Transaction transaction(database_, SQLite::TransactionBehavior::IMMEDIATE);
    for (const NightToStore& night : nights) {
      Result<JournalHead> head = add_night(night);
      if (!head) return failure(head.error());
      heads.push_back(std::move(*head));
      last[night.book] = &night.snapshot;
    }
    for (const auto& [book, snapshot] : last) replace_snapshot(book, *snapshot);
    transaction.commit();
    return heads;
  });
}

Result<std::optional<Snapshot>> DatabaseStore::snapshot(const std::string& book) {
  return guarded(file_, [&]() -> Result<std::optional<Snapshot>> {
    Query row(statements_.snapshot, book);
    if (!row.next()) return std::nullopt;
    const std::optional<Date> date = Date::parse(row.bytes(0));
    Snapshot snapshot{date.value_or(Date()), row.bytes(1), row.bytes(2), row.bytes(3)};
    if (!date || row.bytes(4) != snapshot_digest(book, snapshot)) {
      return failure(damaged("snapshot of " + book + " on " + row.bytes(0), row.bytes(4)));
    }
    return snapshot;
  });
}

// Columns: date, verdict, seq, kind, bytes, previous_hash, hash.
Result<StoredNight> DatabaseStore::night_in(const Query& row, const std::string& book) {
  const std::optional<Date> date = Date::parse(row.bytes(0));
  if (!date) return failure(damaged("nights of " + book, row.bytes(0)));
  StoredNight night{*date,        row.bytes(1), static_cast<std::uint64_t>(row.number(2)),
                    row.bytes(6), row.bytes(4), {}};
  if (row.bytes(3) != night_kind ||
      night.hash != entry_hash(book, night.sequence, night_kind, row.bytes(5), night.bytes)) {
    return failure(damaged("journal of " + book + ", entry " + std::to_string(night.sequence), night.bytes));
  }
  Query batches(statements_.night_batches, book, row.bytes(0));
  while (batches.next()) night.batches.push_back(batches.bytes(0));
  return night;
}

Result<std::optional<StoredNight>> DatabaseStore::night(const std::string& book, Date date) {
  return guarded(file_, [&]() -> Result<std::optional<StoredNight>> {
    const SQLite::Transaction one_view(database_);
    Query row(statements_.night, book, date.to_string());
    if (!row.next()) return std::nullopt;
    Result<StoredNight> night = night_in(row, book);
    if (!night) return failure(night.error());
    return std::move(*night);
  });
}

Result<std::vector<StoredNight>> DatabaseStore::log(const std::string& book, const LogFilter& filter) {
  return guarded(file_, [&]() -> Result<std::vector<StoredNight>> {
    constexpr std::uint64_t largest = std::numeric_limits<std::int64_t>::max();
    const std::string first = filter.from ? filter.from->to_string() : "0000-00-00";
    std::string last = filter.to ? filter.to->to_string() : "9999-99-99";
    if (filter.before) last = std::min(last, filter.before->plus_days(-1).to_string());
    std::vector<StoredNight> nights;
    const SQLite::Transaction one_view(database_);
    Query rows(statements_.log, book, first, last, filter.verdict,
               static_cast<std::int64_t>(std::min<std::uint64_t>(filter.limit, largest)));
    while (rows.next()) {
      Result<StoredNight> night = night_in(rows, book);
      if (!night) return failure(night.error());
      nights.push_back(std::move(*night));
    }
    return nights;
  });
}

}  // namespace nightweigh::store

// Batches and closes.
#include <SQLiteCpp/Transaction.h>

#include <algorithm>

#include "daemon/store/database_store.h"
#include "daemon/store/sqlite_error.h"

namespace nightweigh::store {

namespace {

std::optional<std::string> text_of(const std::optional<Decimal>& value) {
  if (!value) return std::nullopt;
  return value->to_string();
}

// As many digits as a Decimal holds: what was accepted is judged elsewhere.
std::optional<Decimal> decimal_of(const std::string& text) {
  return Decimal::parse(text, 38, 36);
}

}  // namespace

Result<bool> DatabaseStore::knows_batch(const std::string& digest) {
  return guarded(file_, [&]() -> Result<bool> { return Query(statements_.knows_batch, digest).next(); });
}

// Columns: revision, close, dividend, split.
Result<Close> DatabaseStore::close_in(const Query& row, const std::string& instrument, Date date) const {
  Close close;
  close.date = date;
  close.instrument = instrument;
  close.revision = static_cast<int>(row.number(0));
  const auto broken = [&](int column) {
    return failure(damaged("close of " + instrument + " on " + date.to_string(), row.bytes(column)));
  };
  const std::optional<Decimal> price = decimal_of(row.bytes(1));
  if (!price) return broken(1);
  close.close = *price;
  for (const int column : {2, 3}) {
    if (row.is_null(column)) continue;
    std::optional<Decimal>& target = column == 2 ? close.dividend : close.split;
    target = decimal_of(row.bytes(column));
    if (!target) return broken(column);
  }
  return close;
}

Result<std::vector<StoredClose>> DatabaseStore::closes_of(const std::string& instrument, Date date) {
  return guarded(file_, [&]() -> Result<std::vector<StoredClose>> {
    std::vector<StoredClose> all;
    Query rows(statements_.closes_of, instrument, date.to_string());
    while (rows.next()) {
      Result<Close> close = close_in(rows, instrument, date);
      if (!close) return failure(close.error());
      all.push_back({std::move(*close), rows.bytes(4)});
    }
    return all;
  });
}

Result<void> DatabaseStore::store_batch(const StoredBatch& batch) {
  const Close* at = nullptr;  // the row in hand, to name it in an error
  Result<void> stored = guarded(file_, [&]() -> Result<void> {
    SQLite::Transaction transaction(database_, SQLite::TransactionBehavior::IMMEDIATE);
    Query(statements_.insert_batch, batch.digest, batch.source, batch.taken_at_us,
          static_cast<std::int64_t>(batch.closes.size()))
        .run();
    for (const Close& close : batch.closes) {
      at = &close;
      Query(statements_.insert_close, close.instrument, close.date.to_string(), std::int64_t{close.revision},
            close.close.to_string(), text_of(close.dividend), text_of(close.split), batch.digest)
          .run();
    }
    at = nullptr;
    transaction.commit();
    return {};
  });
  if (!stored) {
    stored.error().place += ", batch " + shown(batch.digest);
    if (at != nullptr) {
      stored.error().place += ", close of " + shown(at->instrument) + " on " + at->date.to_string() +
                              " revision " + std::to_string(at->revision);
    }
  }
  return stored;
}

Result<std::vector<std::optional<Close>>> DatabaseStore::day(const std::vector<std::string>& instruments,
                                                             Date date) {
  return guarded(file_, [&]() -> Result<std::vector<std::optional<Close>>> {
    std::vector<std::optional<Close>> lines;
    lines.reserve(instruments.size());
    const SQLite::Transaction one_view(database_);  // all lines from the same state of the database
    for (const std::string& instrument : instruments) {
      Query row(statements_.close_of_day, instrument, date.to_string());
      if (!row.next()) {
        lines.emplace_back();
        continue;
      }
      Result<Close> close = close_in(row, instrument, date);
      if (!close) return failure(close.error());
      lines.emplace_back(std::move(*close));
    }
    return lines;
  });
}

// One descent of the key for each instrument.
Result<std::optional<Date>> DatabaseStore::next_date_with_closes(const std::vector<std::string>& instruments,
                                                                 std::optional<Date> after, Date from) {
  return guarded(file_, [&]() -> Result<std::optional<Date>> {
    const std::string first = (after ? after->plus_days(1) : from).to_string();
    std::optional<Date> next;
    const SQLite::Transaction one_view(database_);
    for (const std::string& instrument : instruments) {
      Query row(statements_.next_date, instrument, first);
      if (!row.next()) continue;
      const std::optional<Date> date = Date::parse(row.bytes(0));
      if (!date) return failure(damaged("dates of " + instrument, row.bytes(0)));
      next = next ? std::min(*next, *date) : *date;
    }
    return next;
  });
}

}  // namespace nightweigh::store

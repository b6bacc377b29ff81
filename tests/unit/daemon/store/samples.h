// Closes, nights and stores to test with.
#pragma once

#include <doctest/doctest.h>

#include <memory>
#include <string>
#include <utility>
#include <vector>

#include "daemon/store/store.h"
#include "strategies/digest/sha256.h"

namespace nightweigh::store {

inline std::unique_ptr<Store> opened(const std::filesystem::path& file,
                                     Store::Mode mode = Store::Mode::write) {
  Result<std::unique_ptr<Store>> store = Store::open(file, mode);
  if (!store) FAIL(store.error().message());
  return std::move(*store);
}

template <class T>
T value_of(Result<T> result) {
  if (!result) FAIL(result.error().message());
  return std::move(*result);
}

inline Error refusal_of(const std::filesystem::path& file, Store::Mode mode = Store::Mode::write) {
  const Result<std::unique_ptr<Store>> store = Store::open(file, mode);
  REQUIRE_FALSE(store);
  INFO(store.error().message());
  CHECK(store.error().place.find(file.parent_path().string()) != std::string::npos);
  CHECK_FALSE(store.error().problem.empty());
  CHECK_FALSE(store.error().remedy.empty());
  return store.error();
}

inline bool has(const std::string& text, const std::string& part) {
  return text.find(part) != std::string::npos;
}

inline Date day_of(const std::string& text) {
  return Date::parse(text).value();
}

inline Close close_of(const std::string& instrument, const std::string& date, const std::string& price,
                      int revision = 0) {
  return {day_of(date), instrument, revision, Decimal::parse(price).value(), std::nullopt, std::nullopt};
}

inline StoredBatch batch_of(const std::string& name, std::vector<Close> closes) {
  return {sha256_hex(name), "drop: " + name, 1'700'000'000'000'000, std::move(closes)};
}

inline NightToStore night_of(const std::string& book, const std::string& date,
                             const std::string& verdict = "stay") {
  const std::string bytes = R"({"book":")" + book + R"(","date":")" + date + R"("})";
  return {book,
          day_of(date),
          verdict,
          bytes,
          {day_of(date), R"({"cash":")" + date + R"("})", std::string("strategy\0bytes ", 15) + date,
           "covariation " + date},
          {"ALDER", "BRINE"}};
}

// Folds the whole journal of a book again; the head it leads to. Fails the test at a broken link.
inline JournalHead refolded(Store& store, const std::string& book) {
  JournalHead head;
  while (true) {
    const std::vector<JournalEntry> page = value_of(store.entries_after(book, head.sequence, 7));
    for (const JournalEntry& entry : page) {
      REQUIRE(entry.sequence == head.sequence + 1);
      REQUIRE(entry.previous_hash == head.hash);
      head = {entry.sequence, entry_hash(book, entry.sequence, entry.kind, head.hash, entry.bytes)};
      REQUIRE(entry.hash == head.hash);
    }
    if (page.size() < 7) return head;
  }
}

}  // namespace nightweigh::store

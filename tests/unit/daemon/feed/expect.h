// Short hands for the parser tests.
#pragma once

#include <doctest/doctest.h>

#include <string>
#include <string_view>

#include "daemon/feed/batch.h"

namespace nightweigh::feed {

inline bool contains(std::string_view text, std::string_view part) {
  return text.find(part) != std::string_view::npos;
}

inline std::string all_messages(const ParsedBatch& batch) {
  std::string text;
  for (const RowError& error : batch.errors) text += error.message() + "\n";
  return text;
}

// The batch is refused with exactly one mistake: at this row and column, with these words in its message.
inline void expect_one(const ParsedBatch& batch, std::size_t row, std::string_view column,
                       std::string_view words, ErrorKind kind = ErrorKind::bad_input) {
  INFO("messages: " << all_messages(batch));
  INFO("expected words: " << std::string(words));
  REQUIRE(batch.errors.size() == 1);
  const RowError& error = batch.errors.front();
  CHECK(error.row == row);
  CHECK(error.column == column);
  CHECK(contains(error.message(), words));
  CHECK(error.kind == kind);
  CHECK_FALSE(error.problem.empty());
  CHECK_FALSE(error.remedy.empty());
}

}  // namespace nightweigh::feed

// A stop request and batches of different sizes.
#include <doctest/doctest.h>

#include <atomic>
#include <string>

#include "daemon/runner/admission.h"
#include "tests/unit/daemon/runner/desk.h"

namespace nightweigh::runner::testing {

namespace {

feed::ParsedBatch batch_of_rows(std::size_t rows) {
  feed::ParsedBatch batch;
  for (std::size_t row = 1; row <= rows; ++row) {
    batch.rows.push_back(
        {row, {day("2025-01-02").plus_days(static_cast<int>(row)), "ALDER", 0, dec("50"), {}, {}}});
  }
  return batch;
}

}  // namespace

TEST_CASE("a long batch is left when the service is to stop; a short one is finished") {
  Desk desk({book()});
  std::atomic<bool> stop = true;
  const auto admitted = [&](std::size_t rows) {
    return admit(batch_of_rows(rows), {}, {}, desk.store(), 100, &stop);
  };
  const Result<Admission> shorter = admitted(50);
  REQUIRE(shorter);
  CHECK(shorter->errors.size() == 50);  // no book holds ALDER here
  const std::map<std::string, std::vector<const BookRunner*>> no_books;
  const Result<Admission> longer = admit(batch_of_rows(20'000), no_books, {}, desk.store(), 1'000'000, &stop);
  REQUIRE_FALSE(longer);
  CHECK(longer.error().kind == ErrorKind::busy);  // a drop file stays, a sender sends again
  CHECK(longer.error().message().find("is stopping") != std::string::npos);
  stop = false;
  const Result<Admission> later = admit(batch_of_rows(20'000), no_books, {}, desk.store(), 1'000'000, &stop);
  REQUIRE(later);
  CHECK(later->errors.size() == 20'000);
}

}  // namespace nightweigh::runner::testing

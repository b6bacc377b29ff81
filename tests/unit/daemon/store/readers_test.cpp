// A reader in another thread beside the writer: always a whole state, never an error, and no growing log.
#include <doctest/doctest.h>

#include <atomic>
#include <filesystem>
#include <thread>

#include "tests/unit/daemon/store/folder.h"
#include "tests/unit/daemon/store/samples.h"

namespace nightweigh::store {

TEST_CASE("readers see whole transactions while the writer writes") {
  const Folder folder;
  const std::unique_ptr<Store> writer = opened(folder.database());
  std::atomic<bool> done{false};
  std::atomic<int> reads{0};
  std::vector<std::string> complaints(2);
  std::vector<std::thread> threads;
  for (std::string& complaint : complaints) {
    threads.emplace_back([&folder, &done, &reads, &complaint] {
      const auto store = Store::open(folder.database(), Store::Mode::read);
      if (!store) {
        complaint = store.error().message();
        return;
      }
      std::uint64_t before = 0;
      while (!done && complaint.empty()) {
        // Both lines of a date come in one batch, so each read has both or none.
        const auto lines =
            (*store)->day({"ALDER", "BRINE"}, day_of("2020-01-01").plus_days(static_cast<int>(before)));
        const auto head = (*store)->head("harbour");
        const auto log = (*store)->log("harbour", {});
        if (!lines || !head || !log) {
          complaint = !lines  ? lines.error().message()
                      : !head ? head.error().message()
                              : log.error().message();
        } else if ((*lines)[0].has_value() != (*lines)[1].has_value()) {
          complaint = "half a batch";
        } else if (head->sequence < before || (!log->empty() && log->front().sequence < head->sequence)) {
          complaint = "an older state after a newer one";
        } else {
          before = head->sequence;
        }
        ++reads;
      }
    });
  }
  const int nights = 300;
  for (int i = 0; i < nights; ++i) {
    const std::string date = day_of("2020-01-01").plus_days(i).to_string();
    REQUIRE(
        writer->store_batch(batch_of(date, {close_of("ALDER", date, "61.2"), close_of("BRINE", date, "7")})));
    REQUIRE(writer->store_nights({night_of("harbour", date)}));
  }
  // A log that checkpoints cannot start over grows with every write.
  const std::uintmax_t log_bytes = std::filesystem::file_size(folder.path() / "nightweigh.db-wal");
  done = true;
  for (std::thread& thread : threads) thread.join();
  for (const std::string& complaint : complaints) CHECK(complaint == "");
  CHECK(reads > 20);
  CHECK(log_bytes <= 16 * 1024 * 1024);
  CHECK(refolded(*writer, "harbour").sequence == nights);
}

}  // namespace nightweigh::store

// The file drop in a real folder.
#include "daemon/feed/drop_folder.h"

#include <fcntl.h>
#include <sys/stat.h>
#include <unistd.h>

#include <atomic>
#include <future>
#include <set>
#include <stdexcept>

#include "expect.h"
#include "network.h"

namespace nightweigh::feed {
namespace {

namespace fs = std::filesystem;

struct Running {
  explicit Running(std::chrono::milliseconds rescan = std::chrono::milliseconds(100), bool start = true,
                   Limits limits = {})
      : runner(network.io), drop(folder.path / "drop") {
    auto opened = DropFolder::open(network.io, drop, limits, runner.deliver(), rescan, runner.report());
    INFO((opened ? std::string() : opened.error().message()));
    REQUIRE(opened.has_value());
    watcher = std::move(*opened);
    if (start) watcher->start();
  }
  ~Running() {
    watcher->stop();
    CHECK(eventually([&] { return watcher->stopped(); }));
  }
  // As a good writer does it: beside the folder, then renamed in.
  void rename_in(const std::string& name, const std::string& text) const {
    write_text(folder.path / "outside", text);
    fs::rename(folder.path / "outside", drop / name);
  }
  bool accepted(const std::string& name) const { return fs::exists(drop / "accepted" / name); }
  bool refused(const std::string& name) const { return fs::exists(drop / "refused" / name); }
  std::string reason(const std::string& name) const {
    return read_text(drop / "refused" / (name + ".reason.txt"));
  }

  const TestFolder folder;
  Network network;
  FakeRunner runner;
  fs::path drop;
  std::unique_ptr<DropFolder> watcher;
};

// A rescan so rare that only an event can explain a fast answer.
constexpr std::chrono::milliseconds rarely = std::chrono::hours(1);

TEST_CASE("files that are there at start, in the order of their names") {
  Running running(rarely, false);
  for (const std::string name : {"c.csv", "a.csv", "b.json", "10.CSV"})
    running.rename_in(name, "text of " + name);
  running.watcher->start();
  CHECK(eventually([&] { return running.accepted("c.csv"); }));
  const auto deliveries = running.runner.deliveries();
  REQUIRE(deliveries.size() == 4);
  CHECK(deliveries[0].source == "drop: 10.CSV");
  CHECK(deliveries[1].source == "drop: a.csv");
  CHECK(deliveries[1].bytes == "text of a.csv");
  CHECK_FALSE(deliveries[1].is_json);
  CHECK(deliveries[2].source == "drop: b.json");
  CHECK(deliveries[2].is_json);
  CHECK(deliveries[3].source == "drop: c.csv");
  CHECK(read_text(running.drop / "accepted" / "a.csv") == "text of a.csv");
  CHECK_FALSE(fs::exists(running.drop / "a.csv"));
}

TEST_CASE("a file that is renamed in, or written and closed, is seen by its event") {
  Running running(rarely);
  running.rename_in("a.csv", "one");
  CHECK(eventually([&] { return running.accepted("a.csv"); }));
  write_text(running.drop / "b.csv", "two");
  CHECK(eventually([&] { return running.accepted("b.csv"); }));
  CHECK(running.runner.count() == 2);
}

TEST_CASE("a file that is still being written is never read half") {
  Running running(std::chrono::milliseconds(20));
  SUBCASE("small pieces, never long without a change") {
    std::ofstream out(running.drop / "slow.csv", std::ios::binary);
    for (int i = 0; i < 50; ++i) {
      out << "0123456789" << std::flush;
      std::this_thread::sleep_for(std::chrono::milliseconds(10));
      CHECK(running.runner.count() == 0);
    }
  }
  SUBCASE("a writer that rests for longer than two looks but keeps the file open") {
    std::ofstream out(running.drop / "slow.csv", std::ios::binary);
    out << std::string(250, 'x') << std::flush;
    std::this_thread::sleep_for(std::chrono::milliseconds(700));
    CHECK(running.runner.count() == 0);
    out << std::string(250, 'y');
  }
  SUBCASE("under a name that is ignored") {
    std::ofstream out(running.drop / "slow.csv.part", std::ios::binary);
    out << std::string(250, 'x') << std::flush;
    std::this_thread::sleep_for(std::chrono::milliseconds(400));
    out << std::string(250, 'y');
    out.close();
    CHECK(running.runner.count() == 0);
    fs::rename(running.drop / "slow.csv.part", running.drop / "slow.csv");
  }
  CHECK(eventually([&] { return running.accepted("slow.csv"); }));
  const auto deliveries = running.runner.deliveries();
  REQUIRE(deliveries.size() == 1);
  CHECK(deliveries[0].bytes.size() == 500);
}

TEST_CASE("a refused file lies beside its reasons") {
  Running running;
  running.runner.answer = [](const std::string&, std::size_t) {
    return refusal("d1",
                   {{ErrorKind::bad_input, 3, "close", "12,5", "has a comma", "Write a decimal point"},
                    {ErrorKind::bad_input, 4, "date", "x", "is not an ISO 8601 date", "Write YYYY-MM-DD"}});
  };
  running.rename_in("a.csv", "text");
  CHECK(eventually([&] { return running.refused("a.csv"); }));
  CHECK(running.reason("a.csv") ==
        "a.csv was refused: nothing of it was stored.\ndigest d1\n"
        "row 3, column close: has a comma: \"12,5\". Write a decimal point\n"
        "row 4, column date: is not an ISO 8601 date: \"x\". Write YYYY-MM-DD\n");
  CHECK(read_text(running.drop / "refused" / "a.csv") == "text");
  CHECK_FALSE(running.accepted("a.csv"));
}

TEST_CASE("repeated names get numbers; nothing is overwritten") {
  Running running;
  running.runner.answer = [](const std::string& bytes, std::size_t) -> Acknowledgement {
    if (bytes == "bad") return refusal("", {{ErrorKind::bad_input, 1, "close", "", "is empty", "Write it"}});
    return {Acknowledgement::Status::known, "", 0, {}, {}};
  };
  for (int i = 1; i <= 3; ++i) {
    running.rename_in("closes.csv", "text " + std::to_string(i));
    const std::string name = i == 1 ? "closes.csv" : "closes-" + std::to_string(i) + ".csv";
    CHECK(eventually([&] { return running.accepted(name); }));
    CHECK(read_text(running.drop / "accepted" / name) == "text " + std::to_string(i));
  }
  for (const std::string name : {"closes.csv", "closes-2.csv"}) {
    running.rename_in("closes.csv", "bad");
    CHECK(eventually([&] { return running.refused(name); }));
    CHECK(contains(running.reason(name), "row 1, column close: is empty"));
  }
  CHECK(contains(running.reason("closes.csv"), "row 1"));  // the first one is still there
}

TEST_CASE("other kinds, too large ones, and names at the limit") {
  Limits limits;
  limits.bytes_max = 1000;
  Running running(std::chrono::milliseconds(100), true, limits);
  running.rename_in("notes.txt", "x");
  running.rename_in("large.csv", std::string(1001, 'x'));
  running.rename_in("limit.csv", std::string(1000, 'x'));
  const std::string longest = std::string(251, 'n') + ".csv";  // 255 bytes, the most that Linux allows
  running.rename_in(longest, "x");
  running.rename_in("odd \n\xFF.csv", "x");
  CHECK(eventually([&] { return running.refused("notes.txt") && running.refused("large.csv"); }));
  CHECK(contains(running.reason("notes.txt"), "neither .csv nor .json"));
  CHECK(contains(running.reason("large.csv"), "is 1001 bytes, more than the limit of 1000"));
  CHECK(eventually([&] { return running.accepted("limit.csv") && running.accepted("odd \n\xFF.csv"); }));
  CHECK(eventually([&] { return running.accepted(std::string(200, 'n') + ".csv"); }));
  CHECK(running.runner.count() == 3);
}

TEST_CASE("pipes, links, folders and hidden or unfinished names are left alone") {
  Running running(std::chrono::milliseconds(20));
  REQUIRE(::mkfifo((running.drop / "pipe.csv").c_str(), 0600) == 0);
  fs::create_directory(running.drop / "folder.csv");
  write_text(running.folder.path / "target", "secret");
  fs::create_symlink(running.folder.path / "target", running.drop / "link.csv");
  for (const std::string name : {".hidden.csv", "a.csv.part", "a.csv.tmp"}) running.rename_in(name, "x");
  running.rename_in("z.csv", "good");
  CHECK(eventually([&] { return running.accepted("z.csv"); }));
  std::this_thread::sleep_for(std::chrono::milliseconds(300));
  CHECK(running.runner.count() == 1);
  for (const std::string name :
       {"pipe.csv", "folder.csv", "link.csv", ".hidden.csv", "a.csv.part", "a.csv.tmp"}) {
    CHECK(fs::symlink_status(running.drop / name).type() != fs::file_type::not_found);
  }
}

TEST_CASE("a batch that the storage does not take stays and is tried again; later names wait") {
  Running running(std::chrono::milliseconds(50));
  std::atomic<bool> disk_full = true;
  running.runner.answer = [&](const std::string& bytes, std::size_t number) -> Acknowledgement {
    if (disk_full && number % 2 == 0) throw std::runtime_error("out of memory");
    if (disk_full) return refusal("", {{ErrorKind::storage, 0, "", "", "the disk is full", "Make room"}});
    CHECK(bytes.size() == 1);
    return {Acknowledgement::Status::taken, "", 1, {}, {}};
  };
  running.rename_in("a.csv", "1");
  CHECK(eventually([&] { return running.runner.count() >= 1; }));
  running.rename_in("b.csv", "2");
  CHECK(eventually([&] { return running.runner.count() >= 4; }));
  const std::size_t tries = running.runner.count();
  std::this_thread::sleep_for(std::chrono::milliseconds(500));
  CHECK(running.runner.count() <= tries + 3);  // 50, 100, 200, 400 ms ...: later each time
  for (const auto& delivery : running.runner.deliveries()) CHECK(delivery.bytes == "1");
  CHECK(fs::exists(running.drop / "a.csv"));
  CHECK(fs::is_empty(running.drop / "refused"));
  CHECK_FALSE(running.runner.lines().empty());
  disk_full = false;
  CHECK(eventually([&] { return running.accepted("a.csv") && running.accepted("b.csv"); }));
}

TEST_CASE("a failed move does not deliver the batch again") {
  Running running(std::chrono::milliseconds(30));
  // A file where the folder should be.
  fs::remove(running.drop / "accepted");
  write_text(running.folder.path / "outside", "in the way");
  fs::rename(running.folder.path / "outside", running.drop / "accepted.part");
  fs::create_symlink(running.drop / "accepted.part", running.drop / "accepted");
  running.rename_in("a.csv", "1");
  CHECK(eventually([&] { return running.runner.lines().size() >= 3; }));
  CHECK(running.runner.count() == 1);
  CHECK(contains(running.runner.lines().front(), "cannot be moved into"));
  fs::remove(running.drop / "accepted");
  CHECK(eventually([&] { return running.accepted("a.csv"); }));
  CHECK(running.runner.count() == 1);
}

TEST_CASE("a file replaced while its batch is in hand is read again") {
  Running running(std::chrono::milliseconds(30));
  running.runner.delay = std::chrono::milliseconds(300);
  running.rename_in("a.csv", "old");
  CHECK(eventually([&] { return running.runner.count() == 1; }));
  running.rename_in("a.csv", "new and longer");
  CHECK(eventually([&] { return running.accepted("a.csv"); }));
  CHECK(read_text(running.drop / "accepted" / "a.csv") == "new and longer");
  const auto deliveries = running.runner.deliveries();
  REQUIRE(deliveries.size() == 2);
  CHECK(deliveries[1].bytes == "new and longer");
}

TEST_CASE("a folder that vanishes is made again, and watched again") {
  Running running(std::chrono::milliseconds(100));
  running.rename_in("a.csv", "1");
  CHECK(eventually([&] { return running.accepted("a.csv"); }));
  SUBCASE("removed") {
    fs::remove_all(running.drop);
  }
  SUBCASE("renamed away") {
    fs::rename(running.drop, running.folder.path / "elsewhere");
  }
  CHECK(eventually([&] { return fs::is_directory(running.drop / "refused"); }));
  running.rename_in("b.csv", "2");
  CHECK(eventually([&] { return running.accepted("b.csv"); }));
  CHECK(running.runner.count() == 2);
  CHECK_FALSE(running.runner.lines().empty());
}

TEST_CASE("events that the kernel drops (its queue overflows) lose no file") {
  std::ifstream limit_file("/proc/sys/fs/inotify/max_queued_events");
  int queue_max = 16384;
  limit_file >> queue_max;
  if (queue_max > 100'000) {
    MESSAGE("skipped: the queue of events holds " << queue_max);
    return;
  }
  Running running(rarely);
  std::promise<void> release;
  boost::asio::post(running.network.io, [&, freed = release.get_future().share()] { freed.wait(); });
  // Two names in turn: equal events that follow each other are kept as one.
  for (int i = 0; i < queue_max + 10; ++i) {
    ::close(::open((running.drop / (i % 2 == 0 ? "a.tmp" : "b.tmp")).c_str(), O_WRONLY | O_CREAT | O_CLOEXEC,
                   0600));
  }
  running.rename_in("late.csv", "1");  // its event has no room
  release.set_value();
  CHECK(eventually([&] { return running.accepted("late.csv"); }));
}

TEST_CASE("many files at once") {
  Running running(std::chrono::milliseconds(200));
  constexpr int files = 600;
  for (int i = 0; i < files; ++i) {
    write_text(running.drop / (std::to_string(i) + ".csv.tmp"), std::to_string(i));
    fs::rename(running.drop / (std::to_string(i) + ".csv.tmp"), running.drop / (std::to_string(i) + ".csv"));
  }
  CHECK(eventually([&] { return running.runner.count() == files && !fs::exists(running.drop / "99.csv"); }));
  std::set<std::string> distinct;
  for (const auto& delivery : running.runner.deliveries()) distinct.insert(delivery.bytes);
  CHECK(distinct.size() == files);
}

TEST_CASE("stop ends after the batch in hand") {
  Running running(std::chrono::milliseconds(50));
  running.runner.delay = std::chrono::milliseconds(300);
  running.rename_in("a.csv", "1");
  running.rename_in("b.csv", "2");
  CHECK(eventually([&] { return running.runner.count() == 1; }));
  running.watcher->stop();
  CHECK_FALSE(running.watcher->stopped());
  CHECK(eventually([&] { return running.watcher->stopped(); }));
  CHECK(running.accepted("a.csv"));
  CHECK(fs::exists(running.drop / "b.csv"));
  CHECK(running.runner.count() == 1);
}

TEST_CASE("a folder that cannot be made") {
  const TestFolder folder;
  write_text(folder.path / "file", "x");
  Network network;
  FakeRunner runner(network.io);
  const auto opened = DropFolder::open(network.io, folder.path / "file" / "drop", {}, runner.deliver());
  REQUIRE_FALSE(opened.has_value());
  CHECK(opened.error().kind == ErrorKind::storage);
  CHECK(contains(opened.error().message(), (folder.path / "file" / "drop").string()));
}

}  // namespace
}  // namespace nightweigh::feed

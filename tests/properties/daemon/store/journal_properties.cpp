// Any sequence of appends and nights over several books, with stores opened and closed in between, against
// a plain model: the chain folds to the head, and nothing is lost, doubled or moved to another book.
#include <doctest/doctest.h>
#include <rapidcheck.h>
#include <stdlib.h>

#include <filesystem>
#include <map>
#include <memory>
#include <string>
#include <system_error>
#include <vector>

#include "daemon/store/store.h"

namespace nightweigh::store {
namespace {

const std::vector<std::string> books{"harbour", "quay", "harbour2"};

struct Model {
  std::vector<JournalEntry> entries;
  std::vector<Date> nights;
  Snapshot snapshot;
};

struct Step {
  int action = 0;  // 0 append, 1 nights, 2 nights of which the last is refused, 3 open again
  std::string text;
  std::vector<int> choices;
};

// A folder that goes when the case ends, also by a failed check.
struct Folder {
  Folder() {
    std::string name = (std::filesystem::temp_directory_path() / "nightweigh-property-XXXXXX").string();
    if (::mkdtemp(name.data()) != nullptr) path = name;
  }
  ~Folder() {
    std::error_code ignored;
    if (!path.empty()) std::filesystem::remove_all(path, ignored);
  }
  std::filesystem::path path;
};

std::unique_ptr<Store> opened(const Folder& folder) {
  RC_ASSERT(!folder.path.empty());
  Result<std::unique_ptr<Store>> store = Store::open(folder.path / "nightweigh.db", Store::Mode::write);
  if (!store) RC_FAIL(store.error().message());
  return std::move(*store);
}

// What the journal must say; the chain is made here from the documented formula alone.
void add(Model& model, const std::string& book, const std::string& kind, const std::string& bytes) {
  JournalEntry entry;
  entry.sequence = model.entries.size() + 1;
  entry.kind = kind;
  entry.bytes = bytes;
  entry.previous_hash = model.entries.empty() ? std::string(64, '0') : model.entries.back().hash;
  entry.hash = entry_hash(book, entry.sequence, kind, entry.previous_hash, bytes);
  model.entries.push_back(entry);
}

void check(Store& store, std::map<std::string, Model>& models) {
  for (const std::string& book : books) {
    const Model& model = models[book];
    const auto head = store.head(book);
    RC_ASSERT(head.has_value());
    RC_ASSERT(head->sequence == model.entries.size());
    RC_ASSERT(head->hash == (model.entries.empty() ? empty_hash : model.entries.back().hash));
    const auto entries = store.entries_after(book, 0, 1000);
    RC_ASSERT(entries.has_value());
    RC_ASSERT(entries->size() == model.entries.size());
    std::string hash = empty_hash;
    for (std::size_t i = 0; i < entries->size(); ++i) {
      const JournalEntry& entry = (*entries)[i];
      RC_ASSERT(entry.previous_hash == hash);
      hash = entry_hash(book, i + 1, entry.kind, hash, entry.bytes);
      RC_ASSERT(entry.hash == hash);
      RC_ASSERT(entry.kind == model.entries[i].kind);
      RC_ASSERT(entry.bytes == model.entries[i].bytes);
    }
    RC_ASSERT(hash == head->hash);
    LogFilter all;
    all.limit = 1000;
    const auto nights = store.log(book, all);
    RC_ASSERT(nights.has_value());
    RC_ASSERT(nights->size() == model.nights.size());
    for (std::size_t i = 0; i < nights->size(); ++i) {
      const StoredNight& night = (*nights)[nights->size() - 1 - i];
      RC_ASSERT(night.date == model.nights[i]);
      RC_ASSERT(model.entries[night.sequence - 1].bytes == night.bytes);
      RC_ASSERT(model.entries[night.sequence - 1].hash == night.hash);
    }
    const auto snapshot = store.snapshot(book);
    RC_ASSERT(snapshot.has_value());
    RC_ASSERT(snapshot->has_value() == !model.nights.empty());
    if (*snapshot) {
      RC_ASSERT((*snapshot)->date == model.snapshot.date);
      RC_ASSERT((*snapshot)->desk == model.snapshot.desk);
      RC_ASSERT((*snapshot)->strategy == model.snapshot.strategy);
      RC_ASSERT((*snapshot)->covariation == model.snapshot.covariation);
    }
  }
}

NightToStore night_after(const Model& model, const std::string& book, const std::string& text, int choice) {
  const Date last = model.nights.empty() ? Date::parse("2020-01-01").value() : model.nights.back();
  NightToStore night;
  night.book = book;
  night.date = last.plus_days(1 + choice % 4);
  night.verdict = choice % 2 == 0 ? "move" : "stay";
  night.bytes = text + std::to_string(choice);
  night.snapshot = {night.date, text, text + "s", std::to_string(choice)};
  night.instruments = {"ALDER"};
  return night;
}

void accept(Model& model, const NightToStore& night) {
  add(model, night.book, night_kind, night.bytes);
  model.nights.push_back(night.date);
  model.snapshot = night.snapshot;
}

}  // namespace
}  // namespace nightweigh::store

namespace rc {
template <>
struct Arbitrary<nightweigh::store::Step> {
  static Gen<nightweigh::store::Step> arbitrary() {
    using nightweigh::store::Step;
    return gen::build<Step>(
        gen::set(&Step::action, gen::inRange(0, 4)), gen::set(&Step::text),
        gen::set(&Step::choices, gen::container<std::vector<int>>(gen::inRange(0, 1000))));
  }
};
}  // namespace rc

namespace nightweigh::store {

TEST_CASE("journal, nights and state follow the model") {
  const bool holds = rc::check([] {
    // Every step waits for the disk: 20 of them are enough to meet each other.
    const auto steps = *rc::gen::resize(20, rc::gen::arbitrary<std::vector<Step>>());
    const Folder folder;
    std::unique_ptr<Store> store = opened(folder);
    std::map<std::string, Model> models;
    for (const Step& step : steps) {
      if (step.action == 0) {
        const std::string& book = books[step.choices.size() % books.size()];
        const auto head = store->append(book, "settings", step.text);
        RC_ASSERT(head.has_value());
        add(models[book], book, "settings", step.text);
        RC_ASSERT(head->hash == models[book].entries.back().hash);
      } else if (step.action == 3) {
        store.reset();
        store = opened(folder);
      } else {
        std::map<std::string, Model> after = models;
        std::vector<NightToStore> nights;
        for (const int choice : step.choices) {
          const std::string& book = books[static_cast<std::size_t>(choice) % books.size()];
          nights.push_back(night_after(after[book], book, step.text, choice));
          accept(after[book], nights.back());
        }
        const bool spoiled = step.action == 2 && !nights.empty();
        if (spoiled) nights.push_back(nights.front());  // the same night again
        const auto heads = store->store_nights(nights);
        RC_ASSERT(heads.has_value() == !spoiled);
        if (spoiled) {
          check(*store, models);
          RC_ASSERT(heads.error().kind == ErrorKind::conflict);
        } else {
          RC_ASSERT(heads->size() == nights.size());
          models = after;
          for (std::size_t i = 0; i < nights.size(); ++i) {
            RC_ASSERT((*heads)[i].hash == models[nights[i].book].entries[(*heads)[i].sequence - 1].hash);
          }
        }
      }
    }
    check(*store, models);
  });
  CHECK(holds);
}

}  // namespace nightweigh::store

// Settings that try to break the reader: none may crash it, hang it or take more than moments.
#include <doctest/doctest.h>

#include <rapidcheck.h>
#include <chrono>

#include <filesystem>

#include "tests/unit/daemon/settings/fixtures.h"

namespace nightweigh::settings {
namespace {

std::string repeated(const std::string& piece, std::size_t times) {
  std::string text;
  text.reserve(piece.size() * times);
  for (std::size_t i = 0; i < times; ++i) text += piece;
  return text;
}

TEST_CASE("a million brackets, and other deep or long texts, are refused quickly") {
  const std::vector<std::pair<const char*, std::string>> texts = {
      {"lists", repeated("[", 999'999)},
      {"maps", repeated("{", 999'999)},
      {"block lists", repeated("- ", 499'999)},
      {"nested keys", repeated("a: ", 300'000)},
      {"complex keys", repeated("? ", 499'999)},
      {"flow keys", repeated("{a: ", 249'999)},
      {"closed brackets", repeated("]", 999'999)},
      {"quotes", repeated("\"", 999'999)},
      {"anchors", repeated("&a ", 333'333)},
      {"tags", repeated("! ", 499'999)},
      {"many keys",
       [] {
         std::string text;
         for (int i = 0; text.size() < 990'000; ++i) text += "k" + std::to_string(i) + ": 1\n";
         return text;
       }()},
      {"the same key", repeated("a: 1\n", 199'999)},
      {"one long key", repeated("k", 999'990)},
      {"line ends", repeated("\n", 999'999)},
      {"documents", repeated("---\n", 249'999)},
      {"a long number", "instruments: " + repeated("9", 999'000)},
  };
  for (const auto& [name, text] : texts) {
    CAPTURE(name);
    const auto begin = std::chrono::steady_clock::now();
    const Errors errors = bad(text);
    const std::chrono::duration<double> took = std::chrono::steady_clock::now() - begin;
    MESSAGE(std::string(name), ": ", took.count(), " s, ", errors[0].message());
    CHECK(took.count() < 20);
    CHECK(errors.size() <= 1001);
    CHECK(errors[0].message().size() < 500);
  }
}

TEST_CASE("a text beyond the limit is refused by its size") {
  const Errors errors = bad(std::string(shortest_settings) + repeated("#", 1'000'000));
  REQUIRE(errors.size() == 1);
  CHECK(errors[0].problem == "is too large");
}

TEST_CASE("files that are none") {
  const auto problem = [](const std::filesystem::path& file) {
    const auto settings = load(file);
    REQUIRE_FALSE(settings.has_value());
    return settings.error().at(0).message();
  };
  CHECK(problem("/nowhere/nightweigh.yaml") == "/nowhere/nightweigh.yaml: is not there. Check the path");
  CHECK(problem("/dev/zero") == "/dev/zero: is not a regular file. Name a plain file");
  CHECK(problem("/") == "/: is not a regular file. Name a plain file");
}

TEST_CASE("too many books and instruments") {
  std::string many_books = "instruments: [{id: A}]\nbooks:\n";
  for (int i = 0; i < 501; ++i) {
    many_books += "  - {name: b" + std::to_string(i) +
                  ", instruments: [A], start: {date: 2025-01-02, cash: {EUR: 1}}, strategy: {rule: "
                  "buy_and_hold}, execution: assumed}\n";
  }
  const Errors book_errors = bad(many_books);
  CAPTURE(book_errors[0].message());
  CHECK(book_errors[0].message().find("At most 500 books") != std::string::npos);
  std::string many_instruments = "instruments:\n";
  for (int i = 0; i < 20'001; ++i) many_instruments += "- {id: A" + std::to_string(i) + "}\n";
  many_instruments +=
      "books: [{name: b, instruments: [A1], start: {date: 2025-01-02, cash: {EUR: 1}}, strategy: {rule: "
      "buy_and_hold}, execution: assumed}]\n";
  const Errors errors = bad(many_instruments);
  CAPTURE(errors[0].message());
  CHECK(errors[0].message().find("At most 20000 instruments") != std::string::npos);
  // One fewer is fine, and a book of a thousand of them too.
  std::string most = "instruments:\n", listed;
  for (int i = 0; i < 20'000; ++i) most += "- {id: A" + std::to_string(i) + "}\n";
  for (int i = 0; i < 1000; ++i) listed += (i > 0 ? ", A" : "A") + std::to_string(i);
  most +=
      "books: [{name: b, instruments: [" + listed +
      "], start: {date: 2025-01-02, cash: {EUR: 1}}, strategy: {rule: constant_mix}, execution: assumed}]\n";
  CHECK(good(most).books[0].instruments.size() == 1000);
}

TEST_CASE("a byte changed, lost or doubled anywhere never breaks the reader") {
  const std::string text =
      std::string(shortest_settings) +
      "    gate: {extra_gain: 0.1, always: false}\n    costs: {lines: {ALDER: {commission_bp: 1}}}\n";
  CHECK(rc::check("mutations", [&] {
    std::string changed = text;
    const int times = *rc::gen::inRange(1, 6);
    for (int i = 0; i < times; ++i) {
      const auto at = *rc::gen::inRange<std::size_t>(0, changed.size());
      switch (*rc::gen::inRange(0, 4)) {
        case 0:
          changed[at] = *rc::gen::arbitrary<char>();
          break;
        case 1:
          changed.erase(at, *rc::gen::inRange<std::size_t>(1, 20));
          break;
        case 2:
          changed.insert(at, changed.substr(at, *rc::gen::inRange<std::size_t>(1, 20)));
          break;
        default:
          changed.insert(at, 1, *rc::gen::elementOf(std::string("[]{},:&*!|>'\"%@`#-? \n\t0e.")));
      }
      if (changed.empty()) changed = "a";
    }
    const auto settings = parse(changed, "nightweigh.yaml");
    if (settings.has_value()) {
      RC_ASSERT(settings->books.size() >= 1U);
      RC_ASSERT(settings->books[0].digest.size() == 64U);
    } else {
      RC_ASSERT(!settings.error().empty());
      RC_ASSERT(settings.error()[0].place.starts_with("nightweigh.yaml"));
    }
  }));
}

}  // namespace
}  // namespace nightweigh::settings

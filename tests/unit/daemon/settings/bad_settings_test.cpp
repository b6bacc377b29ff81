// tests/data/bad_settings holds pairs: NAME.yaml, and NAME.message with what must be said about it, one
// message a line, in the order of the file. Run with NIGHTWEIGH_WRITE_MESSAGES=1 to write the messages
// anew; read the difference before keeping it.
#include <doctest/doctest.h>

#include <algorithm>
#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <sstream>
#include <string>
#include <vector>

#include "daemon/settings/settings.h"

namespace nightweigh::settings {
namespace {

std::string read(const std::filesystem::path& file) {
  std::ifstream stream(file, std::ios::binary);
  REQUIRE_MESSAGE(stream.good(), file.string());
  std::ostringstream text;
  text << stream.rdbuf();
  return text.str();
}

// The folder of the tests stands in messages about calendar files; it differs from machine to machine.
std::string without_folder(std::string text, const std::string& folder) {
  for (std::size_t at = text.find(folder); at != std::string::npos; at = text.find(folder)) {
    text.erase(at, folder.size());
  }
  return text;
}

TEST_CASE("every bad settings file gets exactly its messages") {
  const std::filesystem::path folder = std::filesystem::path(NIGHTWEIGH_TEST_DATA) / "bad_settings";
  std::vector<std::filesystem::path> files;
  for (const auto& entry : std::filesystem::directory_iterator(folder)) {
    if (entry.path().extension() == ".yaml") files.push_back(entry.path());
  }
  std::sort(files.begin(), files.end());
  CHECK(files.size() >= 50);
  for (const std::filesystem::path& file : files) {
    CAPTURE(file.filename().string());
    const auto settings = load(file);
    CHECK_FALSE(settings.has_value());
    if (settings.has_value()) continue;
    std::string messages;
    for (const Error& error : settings.error()) {
      messages += std::string(name_of(error.kind)) + " " + error.message() + "\n";
    }
    messages = without_folder(messages, folder.string() + "/");
    auto message_file = file;
    message_file.replace_extension(".message");
    if (std::getenv("NIGHTWEIGH_WRITE_MESSAGES") != nullptr) std::ofstream(message_file) << messages;
    CHECK(messages == read(message_file));
  }
}

}  // namespace
}  // namespace nightweigh::settings

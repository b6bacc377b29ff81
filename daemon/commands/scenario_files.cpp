// The invented market on disk.
#include <fstream>
#include <system_error>

#include "daemon/commands/scenario_market.h"

namespace nightweigh::commands {

namespace {

namespace fs = std::filesystem;

// Removes what it was told of, unless it is kept: files, then the folders that were made for them.
class Undo {
 public:
  Undo() = default;
  Undo(const Undo&) = delete;
  Undo& operator=(const Undo&) = delete;
  ~Undo() {
    std::error_code ignored;
    for (auto path = made_.rbegin(); path != made_.rend(); ++path) fs::remove(*path, ignored);
  }
  void made(const fs::path& path) { made_.push_back(path); }
  void keep() { made_.clear(); }

 private:
  std::vector<fs::path> made_;
};

Error cannot_write(const fs::path& path, const std::string& why) {
  return {ErrorKind::storage, path.string(), "cannot be written: " + why, "",
          "check the folder's permissions and the free space"};
}

std::optional<Error> make_folder(const fs::path& folder, Undo& undo) {
  std::error_code error;
  if (folder.empty() || fs::is_directory(folder, error)) return std::nullopt;
  if (std::optional<Error> above = make_folder(folder.parent_path(), undo)) return above;
  if (fs::create_directory(folder, error)) undo.made(folder);
  if (error) return cannot_write(folder, error.message());
  return std::nullopt;
}

std::optional<Error> write_file(const fs::path& path, const std::string& bytes, Undo& undo) {
  std::ofstream stream(path, std::ios::binary | std::ios::trunc);
  if (!stream) return cannot_write(path, "it cannot be opened");
  undo.made(path);
  stream << bytes;
  stream.close();
  if (!stream) return cannot_write(path, "the disk may be full");
  return std::nullopt;
}

}  // namespace

Result<WrittenScenario> write_scenario(const fs::path& folder, std::uint64_t seed) {
  std::error_code error;
  const fs::file_status status = fs::status(folder, error);
  if (fs::exists(status) && !fs::is_directory(status))
    return failure({ErrorKind::conflict, folder.string(), "is not a folder", "", "choose another folder"});
  if (fs::is_directory(status)) {
    const bool is_empty = fs::is_empty(folder, error);
    if (error) return failure(cannot_write(folder, error.message()));
    if (!is_empty)
      return failure({ErrorKind::conflict, folder.string(), "is not empty; nothing in it is overwritten", "",
                      "name a new or an empty folder"});
  }

  Undo undo;
  WrittenScenario written;
  for (const ScenarioFile& file : scenario_files(seed)) {
    const fs::path path = folder / file.path;
    if (std::optional<Error> failed = make_folder(path.parent_path(), undo))
      return failure(std::move(*failed));
    if (std::optional<Error> failed = write_file(path, file.bytes, undo)) return failure(std::move(*failed));
    if (file.path.parent_path() == "closes")
      written.monthly.push_back(path);
    else if (file.path.parent_path() == "last")
      written.daily.push_back(path);
    else
      written.settings = path;
  }
  undo.keep();
  return written;
}

}  // namespace nightweigh::commands

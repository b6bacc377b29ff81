#include "daemon/settings/settings.h"

#include "daemon/settings/sections.h"

namespace nightweigh::settings {

ResultOrErrors<Settings> parse(const std::string& text, const std::filesystem::path& file) {
  Problems problems(file);
  const Context context{problems, std::filesystem::absolute(file).parent_path()};
  const auto tree = read_document(text, problems);
  if (!tree) return tl::unexpected(problems.in_file_order());

  Settings out;
  out.file = file;
  MapReader root({&*tree, ""}, problems, "write the keys service, instruments and books");
  out.service = read_service(root.part("service"), context);
  InstrumentTable table;
  const auto instruments = root.required("instruments", "list what the books hold");
  if (instruments) out.instruments = read_instruments(*instruments, table, context);
  const auto books = root.required("books", "list at least one book");
  if (books) out.books = read_books(*books, table, context);
  root.finish();
  if (problems.count() > 0) return tl::unexpected(problems.in_file_order());
  for (BookSettings& book : out.books) resolve(book);
  return out;
}

ResultOrErrors<Settings> load(const std::filesystem::path& file) {
  const auto text = read_small_file(file);
  if (!text) return tl::unexpected(Errors{text.error()});
  return parse(*text, file);
}

}  // namespace nightweigh::settings

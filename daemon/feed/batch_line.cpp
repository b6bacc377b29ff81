#include "daemon/feed/batch_line.h"

#include <utility>

#include "daemon/feed/csv_reader.h"
#include "daemon/feed/rows.h"
#include "daemon/feed/text.h"

namespace nightweigh::feed {

namespace {

BatchLine within_limit(BatchLine out, const Limits& limits) {
  if (out.line.size() <= limits.line_bytes_max) return out;
  out.errors.push_back({ErrorKind::limit, 0, "", "",
                        "would be a line of " + std::to_string(out.line.size()) +
                            " bytes, more than the socket's limit of " +
                            std::to_string(limits.line_bytes_max),
                        "Split the file, or rename it into the drop folder, which takes larger files"});
  out.line.clear();
  return out;
}

}  // namespace

BatchLine csv_to_line(std::string_view bytes, const Limits& limits) {
  BatchLine out;
  ParsedBatch batch = parse_csv(bytes, limits);
  out.errors = std::move(batch.errors);
  if (!out.ok()) return out;
  out.rows = batch.rows.size();

  // The text is known to be good: a second pass copies the fields as they stand.
  if (bytes.substr(0, utf8_mark.size()) == utf8_mark) bytes.remove_prefix(utf8_mark.size());
  CsvReader reader(bytes);
  reader.next();
  std::vector<std::string> names;
  for (const std::string_view name : reader.fields()) names.emplace_back(name);
  out.line.reserve(bytes.size() * 2);
  out.line = R"({"closes":[)";
  while (reader.next() == CsvReader::Step::record && !reader.is_blank()) {
    if (out.line.back() == '}') out.line += ',';
    char separator = '{';
    for (std::size_t i = 0; i < names.size(); ++i) {
      if (reader.fields()[i].empty()) continue;
      out.line += separator;
      // Every good value is plain ASCII without quotes: digits, '.', '-', '_' and capital letters.
      out.line.append("\"").append(names[i]).append("\":\"").append(reader.fields()[i]).append("\"");
      separator = ',';
    }
    out.line += '}';
  }
  out.line += "]}";
  return within_limit(std::move(out), limits);
}

BatchLine json_to_line(std::string_view bytes, const Limits& limits) {
  BatchLine out;
  ParsedBatch batch = parse_json(bytes, limits);
  out.errors = std::move(batch.errors);
  if (!out.ok()) return out;
  out.rows = batch.rows.size();
  out.line = bytes;
  for (char& c : out.line) {
    if (c == '\n' || c == '\r') c = ' ';
  }
  return within_limit(std::move(out), limits);
}

}  // namespace nightweigh::feed

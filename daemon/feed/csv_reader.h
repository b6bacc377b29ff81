// Records of an RFC 4180 text. A state machine of our own, because the CSV libraries at hand trim spaces,
// accept stray quotes, or lose the place of a mistake; here every byte counts and has a row.
#pragma once

#include <cstddef>
#include <string>
#include <string_view>
#include <vector>

namespace nightweigh::feed {

class CsvReader {
 public:
  // Fields of one record that are kept; further ones are only counted, so that a record of a million
  // commas costs no memory.
  static constexpr std::size_t fields_kept_max = 32;

  enum class Step { record, end, fault };

  // The text must outlive the reader; fields are views into it where nothing is doubled.
  explicit CsvReader(std::string_view text);

  // Reads the next record: fields() and field_count() then describe it. fault: problem() and remedy()
  // say what, and nothing more can be read. CRLF and LF both end a record; a quoted field may hold them.
  Step next();

  const std::vector<std::string_view>& fields() const { return fields_; }
  std::size_t field_count() const { return field_count_; }
  // The record is an empty line: one field, unquoted, without a byte.
  bool is_blank() const { return blank_; }
  // The record was ended by a line break, not by the end of the text.
  bool ended_by_break() const { return ended_by_break_; }
  const std::string& problem() const { return problem_; }
  const std::string& remedy() const { return remedy_; }

 private:
  bool read_quoted();
  bool read_plain();
  void keep(std::string_view field);
  bool fault(const char* problem, const char* remedy);

  std::string_view text_;
  std::size_t at_ = 0;
  std::vector<std::string_view> fields_;
  std::vector<std::string> undoubled_;  // fields that had doubled quotes; never reallocates
  std::size_t field_count_ = 0;
  bool blank_ = false;
  bool ended_by_break_ = false;
  std::string problem_, remedy_;
};

}  // namespace nightweigh::feed

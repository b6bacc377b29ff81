#include "daemon/feed/csv_reader.h"

namespace nightweigh::feed {

CsvReader::CsvReader(std::string_view text) : text_(text) {
  fields_.reserve(fields_kept_max);
  undoubled_.reserve(fields_kept_max);
}

bool CsvReader::fault(const char* problem, const char* remedy) {
  problem_ = problem;
  remedy_ = remedy;
  at_ = text_.size();
  return false;
}

void CsvReader::keep(std::string_view field) {
  if (field_count_++ < fields_kept_max) fields_.push_back(field);
}

// at_ stands on the opening quote.
bool CsvReader::read_quoted() {
  const std::size_t start = ++at_;
  bool doubled = false;
  for (;;) {
    const std::size_t quote = text_.find('"', at_);
    if (quote == std::string_view::npos) {
      return fault("has a quote that is never closed",
                   "Close it; a quote inside a quoted field is written twice");
    }
    at_ = quote + 1;
    if (at_ < text_.size() && text_[at_] == '"') {
      doubled = true;
      ++at_;
      continue;
    }
    break;
  }
  const std::string_view raw = text_.substr(start, at_ - 1 - start);
  if (at_ < text_.size() && text_[at_] != ',' && text_[at_] != '\n' && text_[at_] != '\r') {
    return fault("has text after a closing quote",
                 "Put the whole field in quotes; a quote inside is written twice");
  }
  if (!doubled || field_count_ >= fields_kept_max) {
    keep(raw);
    return true;
  }
  std::string& field = undoubled_.emplace_back();
  field.reserve(raw.size());
  for (std::size_t i = 0; i < raw.size(); ++i) {
    field += raw[i];
    if (raw[i] == '"') ++i;
  }
  keep(field);
  return true;
}

bool CsvReader::read_plain() {
  const std::size_t start = at_;
  while (at_ < text_.size()) {
    const char c = text_[at_];
    if (c == ',' || c == '\n' || c == '\r') break;
    if (c == '"') {
      return fault("has a quote inside an unquoted field",
                   "Put the whole field in quotes and write the quote twice");
    }
    ++at_;
  }
  keep(text_.substr(start, at_ - start));
  return true;
}

CsvReader::Step CsvReader::next() {
  fields_.clear();
  undoubled_.clear();
  field_count_ = 0;
  blank_ = ended_by_break_ = false;
  if (!problem_.empty()) return Step::fault;
  if (at_ >= text_.size()) return Step::end;
  const std::size_t start = at_;
  for (;;) {
    const bool quoted = at_ < text_.size() && text_[at_] == '"';
    if (!(quoted ? read_quoted() : read_plain())) return Step::fault;
    blank_ = at_ == start;
    if (at_ >= text_.size()) return Step::record;
    const char c = text_[at_++];
    if (c == ',') continue;
    if (c == '\r') {
      if (at_ >= text_.size() || text_[at_] != '\n') {
        fault("has a carriage return that no line feed follows", "End the lines with LF or CRLF");
        return Step::fault;
      }
      ++at_;
    }
    ended_by_break_ = true;
    return Step::record;
  }
}

}  // namespace nightweigh::feed

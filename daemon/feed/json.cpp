// parse_json: one pass over the events of the JSON parser, without a tree in memory. Numbers arrive with
// their text, so that no price ever passes through a double; depth, keys and types are checked as they
// come, so that hostile text is dropped at the first byte that shows it.
#include <nlohmann/json.hpp>
#include <utility>

#include "daemon/feed/batch.h"
#include "daemon/feed/rows.h"
#include "daemon/feed/text.h"
#include "strategies/digest/sha256.h"

namespace nightweigh::feed {

namespace {

using Json = nlohmann::json;

constexpr std::string_view form_remedy =
    R"(Send one JSON object, {"closes":[{"date":"2026-03-02","instrument":"ALDER","close":"61.20"}]})";

class BatchHandler final : public nlohmann::json_sax<Json> {
 public:
  BatchHandler(RowCollector& rows, const Limits& limits, std::size_t size)
      : rows_(rows), limits_(limits), size_(size) {}

  bool null() override { return scalar(Kind::null, "null"); }
  bool boolean(bool value) override { return scalar(Kind::boolean, value ? "true" : "false"); }
  bool number_integer(number_integer_t value) override { return scalar(Kind::number, std::to_string(value)); }
  bool number_unsigned(number_unsigned_t value) override {
    return scalar(Kind::number, std::to_string(value));
  }
  bool number_float(number_float_t /*value*/, const string_t& text) override {
    // The parser puts the C locale's decimal point into the text; JSON knows only '.'.
    std::string plain = text;
    for (char& c : plain) {
      if (std::string_view("0123456789+-eE").find(c) == std::string_view::npos) c = '.';
    }
    return scalar(Kind::number, plain);
  }
  bool string(string_t& text) override { return scalar(Kind::string, text); }
  bool binary(binary_t& /*value*/) override { return false; }  // JSON text has none

  bool start_object(std::size_t /*elements*/) override { return open(true); }
  bool start_array(std::size_t /*elements*/) override { return open(false); }
  bool end_object() override { return close(); }
  bool end_array() override { return close(); }

  bool key(string_t& name) override {
    if (skipped_depth_ > 0) return true;
    if (place_ == Place::top) {
      in_closes_key_ = name == "closes";
      if (in_closes_key_) {
        if (std::exchange(closes_seen_, true)) return twice(0, name);
      } else if (name == "token") {
        // The value is a secret: it is never repeated.
        report({ErrorKind::not_built, 0, name, "", "this version asks for no token", "Leave it out"});
      } else {
        report(
            {ErrorKind::bad_input, 0, shown_start(name), "", "is an unknown key", std::string(form_remedy)});
      }
    } else {
      column_ = column_named(name);
      if (!column_) {
        report(column_refused(row_, name));
      } else if (cell().state != Cell::State::absent) {
        return twice(row_, name);
      }
    }
    return !rows_.stopped();
  }

  bool parse_error(std::size_t position, const std::string& token,
                   const nlohmann::detail::exception& error) override {
    RowError out;
    out.row = place_ == Place::row || place_ == Place::closes ? row_ : 0;
    out.value = shown_start(token);
    const std::string at = " at byte " + std::to_string(position);
    // The parser stops at the first letter that fits no word of JSON.
    const std::string tail = token.substr(token.find_last_of(":,[ \t\r\n") + 1);
    const bool not_finite =
        tail == "N" || tail == "na" || tail == "I" || tail == "i" || tail == "-I" || tail == "-i";
    out.remedy = form_remedy;
    if (error.id == 406) {  // out_of_range: a number that no double holds
      out.value = "";
      out.problem = "has a number far beyond every price" + at;
      out.remedy = "Write a decimal number like 61.20";
    } else if (position > size_ || (position == size_ && token.empty())) {
      out.value = "";
      out.problem = size_ == 0 ? "is empty" : "ends in the middle of the JSON text" + at;
    } else if (place_ == Place::done) {
      out.problem = "has text after the end of the batch" + at;
      out.remedy = "Send one JSON object and nothing after it";
    } else if (not_finite) {
      out.problem = "is not valid JSON" + at;
      out.remedy = "JSON has no NaN and no Infinity; leave the row out where there is no close";
    } else {
      out.problem = "is not valid JSON" + at;
    }
    report(std::move(out));
    return false;
  }

 private:
  enum class Kind { null, boolean, number, string };
  enum class Place { start, top, closes, row, done };

  bool report(RowError error) {
    rows_.report(std::move(error));
    return !rows_.stopped();
  }

  bool twice(std::size_t row, const std::string& name) {
    rows_.report_and_stop(
        {ErrorKind::bad_input, row, name, "", "stands twice in one object", "Keep one of the two"});
    return false;
  }

  Cell& cell() { return cells_.at(static_cast<std::size_t>(*column_)); }
  std::string& buffer() { return buffers_.at(static_cast<std::size_t>(*column_)); }

  bool wrong_type(const char* what, std::string_view value) {
    const bool text_only = *column_ == Column::date || *column_ == Column::instrument;
    cell().state = Cell::State::faulty;
    return report(
        {ErrorKind::bad_input, row_, std::string(column_name(*column_)), shown_start(value),
         std::string("is ") + what,
         text_only ? "Write it as a JSON string" : "Write it as a JSON string or number, like \"61.20\""});
  }

  bool scalar(Kind kind, std::string_view text) {
    if (skipped_depth_ > 0) return true;
    switch (place_) {
      case Place::start:
        rows_.report_and_stop({ErrorKind::bad_input, 0, "", shown_start(text), "is not a JSON object",
                               std::string(form_remedy)});
        return false;
      case Place::top:
        return !in_closes_key_ || report({ErrorKind::bad_input, 0, "closes", shown_start(text),
                                          "is not an array", std::string(form_remedy)});
      case Place::closes:
        ++row_;
        return report({ErrorKind::bad_input, row_, "", shown_start(text), "is not an object",
                       "Write each row as an object with date, instrument and close"});
      case Place::row:
        break;
      case Place::done:
        return false;
    }
    if (!column_) return true;
    const bool text_only = *column_ == Column::date || *column_ == Column::instrument;
    if (kind == Kind::null && !is_required(*column_)) {
      // Data jobs write null where there is none; the key counts as seen.
      text = "";
    } else if (kind == Kind::null || kind == Kind::boolean || (kind == Kind::number && text_only)) {
      return wrong_type(kind == Kind::null      ? "null"
                        : kind == Kind::boolean ? "true or false"
                                                : "a number",
                        kind == Kind::number ? text : std::string_view{});
    }
    buffer() = text;
    cell().state = Cell::State::present;
    cell().text = buffer();
    return true;
  }

  bool open(bool object) {
    if (++depth_ > limits_.json_depth_max) {
      rows_.report_and_stop({ErrorKind::limit, row_, "", "",
                             "nests deeper than " + std::to_string(limits_.json_depth_max) + " levels",
                             std::string(form_remedy)});
      return false;
    }
    if (skipped_depth_ > 0) {
      ++skipped_depth_;
      return true;
    }
    const char* what = object ? "an object" : "an array";
    switch (place_) {
      case Place::start:
        if (object) {
          place_ = Place::top;
          return true;
        }
        rows_.report_and_stop(
            {ErrorKind::bad_input, 0, "", "", "is an array, not an object", std::string(form_remedy)});
        return false;
      case Place::top:
        if (in_closes_key_ && !object) {
          place_ = Place::closes;
          return true;
        }
        skipped_depth_ = 1;
        return !in_closes_key_ || report({ErrorKind::bad_input, 0, "closes", "", "is an object, not an array",
                                          std::string(form_remedy)});
      case Place::closes:
        ++row_;
        if (object) {
          place_ = Place::row;
          cells_ = Cells{};
          return true;
        }
        skipped_depth_ = 1;
        return report({ErrorKind::bad_input, row_, "", "", "is an array, not an object",
                       "Write each row as an object with date, instrument and close"});
      case Place::row:
        skipped_depth_ = 1;
        return !column_ || wrong_type(what, "");
      case Place::done:
        break;
    }
    return false;
  }

  bool close() {
    --depth_;
    if (skipped_depth_ > 0) {
      --skipped_depth_;
      return true;
    }
    if (place_ == Place::row) {
      place_ = Place::closes;
      rows_.add(row_, cells_);
    } else if (place_ == Place::closes) {
      place_ = Place::top;
    } else {
      place_ = Place::done;
      if (!closes_seen_) {
        report({ErrorKind::bad_input, 0, "closes", "", "is missing", std::string(form_remedy)});
      }
    }
    return !rows_.stopped();
  }

  RowCollector& rows_;
  const Limits& limits_;
  const std::size_t size_;
  Place place_ = Place::start;
  int depth_ = 0;
  int skipped_depth_ = 0;  // inside a value that is reported already
  bool closes_seen_ = false;
  bool in_closes_key_ = false;
  std::size_t row_ = 0;
  std::optional<Column> column_;  // nullopt: the key was refused
  Cells cells_;
  std::array<std::string, column_count> buffers_;
};

}  // namespace

ParsedBatch parse_json(std::string_view bytes, const Limits& limits) {
  RowCollector rows(limits);
  std::string digest = sha256_hex(bytes);
  if (bytes.size() > limits.bytes_max) {
    rows.report({ErrorKind::limit, 0, "", "",
                 "is " + std::to_string(bytes.size()) + " bytes, more than the limit of " +
                     std::to_string(limits.bytes_max),
                 "Send the rows as several batches"});
  } else if (auto fault = find_encoding_fault(bytes)) {
    // Also keeps NUL bytes from the parser, which would take one for the end of the text.
    rows.report({ErrorKind::bad_input, 0, "", fault->value, fault->problem, fault->remedy});
  } else if (bytes.substr(0, utf8_mark.size()) == utf8_mark) {
    rows.report({ErrorKind::bad_input, 0, "", "", "starts with a byte order mark",
                 "Write JSON without one (RFC 8259, section 8.1)"});
  } else {
    BatchHandler handler(rows, limits, bytes.size());
    Json::sax_parse(bytes.begin(), bytes.end(), &handler);
  }
  return rows.finish(std::move(digest));
}

}  // namespace nightweigh::feed

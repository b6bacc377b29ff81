#include "daemon/domain/result.h"

#include <array>
#include <cstdio>

namespace nightweigh {

std::string Error::message() const {
  std::string text = place;
  if (!text.empty()) text += ": ";
  text += problem;
  if (!value.empty()) text += ": \"" + value + "\"";
  if (!remedy.empty()) text += ". " + remedy;
  return text;
}

const char* name_of(ErrorKind kind) {
  switch (kind) {
    case ErrorKind::bad_input:
      return "bad_input";
    case ErrorKind::bad_settings:
      return "bad_settings";
    case ErrorKind::conflict:
      return "conflict";
    case ErrorKind::not_found:
      return "not_found";
    case ErrorKind::not_built:
      return "not_built";
    case ErrorKind::limit:
      return "limit";
    case ErrorKind::storage:
      return "storage";
    case ErrorKind::corrupted:
      return "corrupted";
    case ErrorKind::busy:
      return "busy";
  }
  return "bad_input";
}

namespace {

// Length of the well-formed UTF-8 sequence at text[at], or 0 (RFC 3629, table 3-7 of Unicode).
std::size_t utf8_length(const std::string& text, std::size_t at) {
  const auto byte = [&](std::size_t i) {
    return i < text.size() ? static_cast<unsigned char>(text[i]) : static_cast<unsigned char>(0);
  };
  const auto tail = [&](std::size_t i) { return byte(i) >= 0x80 && byte(i) <= 0xBF; };
  const unsigned char first = byte(at), second = byte(at + 1);
  if (first < 0x80) return 1;
  if (first >= 0xC2 && first <= 0xDF) return tail(at + 1) ? 2 : 0;
  if (first >= 0xE0 && first <= 0xEF) {
    const bool second_fits = tail(at + 1) && !(first == 0xE0 && second < 0xA0) && !(first == 0xED && second > 0x9F);
    return second_fits && tail(at + 2) ? 3 : 0;
  }
  if (first >= 0xF0 && first <= 0xF4) {
    const bool second_fits = tail(at + 1) && !(first == 0xF0 && second < 0x90) && !(first == 0xF4 && second > 0x8F);
    return second_fits && tail(at + 2) && tail(at + 3) ? 4 : 0;
  }
  return 0;
}

}  // namespace

std::string shown(const std::string& text, std::size_t max_bytes) {
  std::string out;
  for (std::size_t i = 0; i < text.size();) {
    if (out.size() >= max_bytes) return out + "...";
    const std::size_t length = utf8_length(text, i);
    const auto byte = static_cast<unsigned char>(text[i]);
    if (length == 0 || byte < 0x20 || byte == 0x7F) {
      std::array<char, 5> escaped{};
      std::snprintf(escaped.data(), escaped.size(), "\\x%02x", byte);
      out += escaped.data();
      ++i;
    } else {
      out.append(text, i, length);
      i += length;
    }
  }
  return out;
}

}  // namespace nightweigh

#include "daemon/domain/result.h"

#include <array>
#include <cstdio>

#include "daemon/domain/utf8.h"

namespace nightweigh {

std::string Error::message() const {
  std::string text = place;
  if (!text.empty()) text += ": ";
  text += problem;
  if (!value.empty()) text += ": \"" + value + "\"";
  if (!remedy.empty()) {
    text += ". " + remedy;
    char& first = text[text.size() - remedy.size()];  // remedies are kept in lower case; here one ends a text
    if (first >= 'a' && first <= 'z') first = static_cast<char>(first - 'a' + 'A');
  }
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

std::string shown(const std::string& text, std::size_t max_bytes) {
  std::string out;
  for (std::size_t i = 0; i < text.size();) {
    const std::size_t length = utf8_length(text, i);
    const auto byte = static_cast<unsigned char>(text[i]);
    // U+0080 to U+009F are control characters too; some terminals act on them.
    const bool second_control = length == 2 && byte == 0xC2 && static_cast<unsigned char>(text[i + 1]) < 0xA0;
    std::string piece;
    if (length == 0 || byte < 0x20 || byte == 0x7F || second_control) {
      std::array<char, 5> escaped{};
      std::snprintf(escaped.data(), escaped.size(), "\\x%02x", byte);
      piece = escaped.data();
      ++i;
      if (second_control) {
        std::snprintf(escaped.data(), escaped.size(), "\\x%02x", static_cast<unsigned char>(text[i]));
        piece += escaped.data();
        ++i;
      }
    } else {
      piece = text.substr(i, length);
      i += length;
    }
    if (out.size() + piece.size() > max_bytes) return out + "...";
    out += piece;
  }
  return out;
}

}  // namespace nightweigh

#include "daemon/domain/utf8.h"

namespace nightweigh {

std::size_t utf8_length(std::string_view text, std::size_t at) {
  const auto byte = [&](std::size_t i) {
    return i < text.size() ? static_cast<unsigned char>(text[i]) : static_cast<unsigned char>(0);
  };
  const auto tail = [&](std::size_t i) { return byte(i) >= 0x80 && byte(i) <= 0xBF; };
  const unsigned char first = byte(at), second = byte(at + 1);
  if (first < 0x80) return 1;
  if (first >= 0xC2 && first <= 0xDF) return tail(at + 1) ? 2 : 0;
  if (first >= 0xE0 && first <= 0xEF) {
    const bool second_fits =
        tail(at + 1) && !(first == 0xE0 && second < 0xA0) && !(first == 0xED && second > 0x9F);
    return second_fits && tail(at + 2) ? 3 : 0;
  }
  if (first >= 0xF0 && first <= 0xF4) {
    const bool second_fits =
        tail(at + 1) && !(first == 0xF0 && second < 0x90) && !(first == 0xF4 && second > 0x8F);
    return second_fits && tail(at + 2) && tail(at + 3) ? 4 : 0;
  }
  return 0;
}

std::optional<std::size_t> first_invalid_utf8(std::string_view text) {
  for (std::size_t at = 0; at < text.size();) {
    const std::size_t length = utf8_length(text, at);
    if (length == 0) return at;
    at += length;
  }
  return std::nullopt;
}

}  // namespace nightweigh

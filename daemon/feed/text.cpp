#include "daemon/feed/text.h"

#include <algorithm>

#include "daemon/domain/result.h"
#include "daemon/domain/utf8.h"

namespace nightweigh::feed {

namespace {

bool looks_like_utf16(std::string_view bytes) {
  if (bytes.size() < 2) return false;
  if (bytes.substr(0, 2) == "\xFF\xFE" || bytes.substr(0, 2) == "\xFE\xFF") return true;
  // Without a mark: in Latin text every second byte is NUL.
  const std::size_t looked_at = std::min<std::size_t>(bytes.size(), 64);
  std::size_t even = 0, odd = 0;
  for (std::size_t i = 0; i < looked_at; ++i) {
    if (bytes[i] == '\0') ++(i % 2 == 0 ? even : odd);
  }
  return std::max(even, odd) * 4 >= looked_at && std::min(even, odd) == 0;
}

}  // namespace

std::string shown_start(std::string_view text, std::size_t max_bytes) {
  // Every byte is at least one byte of output, so a little more than max_bytes decides what is shown.
  return shown(std::string(text.substr(0, max_bytes + 8)), max_bytes);
}

std::optional<EncodingFault> find_encoding_fault(std::string_view bytes) {
  const std::size_t nul = bytes.find('\0');
  const std::string_view before_nul = bytes.substr(0, nul);
  const std::size_t malformed = first_invalid_utf8(before_nul).value_or(before_nul.size());
  if (malformed == bytes.size()) return std::nullopt;
  EncodingFault fault;
  fault.at = malformed;
  fault.value = shown_start(bytes.substr(malformed), 8);
  if (looks_like_utf16(bytes)) {
    fault.problem = "looks like UTF-16 text";
    fault.remedy = "Write it as UTF-8";
  } else if (malformed == nul) {
    fault.problem = "holds a NUL byte";
    fault.remedy = "Write plain UTF-8 text; a NUL byte usually means a damaged or a binary file";
  } else {
    fault.problem = "is not valid UTF-8";
    fault.remedy = "Write it as UTF-8, not as Latin-1 or another encoding";
  }
  fault.problem += " at byte " + std::to_string(malformed + 1);
  return fault;
}

}  // namespace nightweigh::feed

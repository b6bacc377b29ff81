// Encoding checks that both parsers make before they look at the format.
#pragma once

#include <cstddef>
#include <optional>
#include <string>
#include <string_view>

namespace nightweigh::feed {

struct EncodingFault {
  std::size_t at = 0;  // offset of the byte, from 0
  std::string problem;
  std::string value;  // the bytes, printable
  std::string remedy;
};

// The first byte that is not well-formed UTF-8 (RFC 3629) or is NUL; text that looks like UTF-16 is
// recognised. A byte order mark at the start is well-formed UTF-8 here. O(bytes).
std::optional<EncodingFault> find_encoding_fault(std::string_view bytes);

// The three bytes of a UTF-8 byte order mark.
inline constexpr std::string_view utf8_mark = "\xEF\xBB\xBF";

// shown() of the start of a text that may be megabytes long.
std::string shown_start(std::string_view text, std::size_t max_bytes = 80);

}  // namespace nightweigh::feed

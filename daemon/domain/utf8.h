// Well-formed UTF-8 (RFC 3629; table 3-7 of the Unicode standard).
#pragma once

#include <cstddef>
#include <optional>
#include <string_view>

namespace nightweigh {

// Length in bytes of the well-formed sequence at text[at]; 0 where there is none. at < text.size().
std::size_t utf8_length(std::string_view text, std::size_t at);

// Offset of the first byte that belongs to no well-formed sequence; nullopt where the whole text is good.
std::optional<std::size_t> first_invalid_utf8(std::string_view text);

}  // namespace nightweigh

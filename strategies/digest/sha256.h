// SHA-256 (FIPS 180-4) of bytes, by OpenSSL's EVP interface.
#pragma once

#include <string>
#include <string_view>

namespace nightweigh {

// 64 lower-case hexadecimal digits.
std::string sha256_hex(std::string_view bytes);

// The 32 bytes themselves.
std::string sha256_bytes(std::string_view bytes);

}  // namespace nightweigh

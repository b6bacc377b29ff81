#include "strategies/digest/sha256.h"

#include <openssl/evp.h>

#include <new>

namespace nightweigh {

std::string sha256_bytes(std::string_view bytes) {
  std::string digest(32, '\0');
  unsigned length = 0;
  // Can only fail for want of memory or of the algorithm, which every supported OpenSSL has.
  if (EVP_Digest(bytes.data(), bytes.size(), reinterpret_cast<unsigned char*>(digest.data()), &length,
                 EVP_sha256(), nullptr) != 1) {
    throw std::bad_alloc();
  }
  return digest;
}

std::string sha256_hex(std::string_view bytes) {
  static constexpr char digits[] = "0123456789abcdef";
  std::string hex;
  hex.reserve(64);
  for (const char byte : sha256_bytes(bytes)) {
    hex += digits[static_cast<unsigned char>(byte) >> 4];
    hex += digits[static_cast<unsigned char>(byte) & 15];
  }
  return hex;
}

}  // namespace nightweigh

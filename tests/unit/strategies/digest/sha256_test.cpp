#include "strategies/digest/sha256.h"

#include <doctest/doctest.h>

#include <string>

namespace nightweigh {
namespace {

// Examples of FIPS 180-4 as NIST publishes them ("SHA-256 examples"); the empty message and the million
// letters are from the same body's test vectors. Values from memory, agreed with coreutils' sha256sum.
TEST_CASE("SHA-256: published examples") {
  CHECK(sha256_hex("abc") == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad");
  CHECK(sha256_hex("") == "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855");
  CHECK(sha256_hex("abcdbcdecdefdefgefghfghighijhijkijkljklmklmnlmnomnopnopq") ==
        "248d6a61d20638b8e5c026930c3e6039a33ce45964ff2167f6ecedd419db06c1");
  CHECK(sha256_hex(std::string(1000000, 'a')) ==
        "cdc76e5c9914fb9281a1c7e284d73e67f1809a48a497200e046d39ccc7112cd0");
}

TEST_CASE("SHA-256: the bytes and the digits say the same") {
  const std::string bytes = sha256_bytes("abc");
  REQUIRE(bytes.size() == 32);
  CHECK(static_cast<unsigned char>(bytes[0]) == 0xba);
  CHECK(static_cast<unsigned char>(bytes[31]) == 0xad);
}

TEST_CASE("SHA-256: a zero byte is a byte like any other") {
  CHECK(sha256_hex(std::string("a\0b", 3)) != sha256_hex("a"));
  CHECK(sha256_hex(std::string(1, '\0')) != sha256_hex(""));
}

}  // namespace
}  // namespace nightweigh

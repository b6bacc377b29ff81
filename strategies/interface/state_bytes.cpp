#include "strategies/interface/state_bytes.h"

#include <bit>
#include <cstring>

#include "strategies/digest/sha256.h"

namespace nightweigh::strategies {

namespace {

constexpr std::string_view magic("NWSTATE\0", 8);
constexpr std::size_t digest_size = 32;

template <class Integer>
void put(std::string& out, Integer value) {
  for (std::size_t i = 0; i < sizeof(Integer); ++i) out += static_cast<char>((value >> (8 * i)) & 0xFF);
}

// Takes from the front of `bytes`; a false return means that they ran out.
template <class Integer>
bool take(std::string_view& bytes, Integer& value) {
  if (bytes.size() < sizeof(Integer)) return false;
  value = 0;
  for (std::size_t i = 0; i < sizeof(Integer); ++i) {
    value |= static_cast<Integer>(static_cast<unsigned char>(bytes[i])) << (8 * i);
  }
  bytes.remove_prefix(sizeof(Integer));
  return true;
}

bool take(std::string_view& bytes, std::size_t length, std::string& out) {
  if (bytes.size() < length) return false;
  out.assign(bytes.substr(0, length));
  bytes.remove_prefix(length);
  return true;
}

}  // namespace

std::string write_state(const StateBytes& state) {
  std::string out(magic);
  put(out, state.format);
  put(out, static_cast<std::uint32_t>(state.rule.size()));
  out += state.rule;
  put(out, state.m);
  out += state.choice_digest;
  put(out, state.days);
  put(out, static_cast<std::uint64_t>(state.values.size()));
  for (const double value : state.values) put(out, std::bit_cast<std::uint64_t>(value));
  return out + sha256_bytes(out);
}

Outcome<StateBytes> read_state(std::string_view bytes) {
  const char* remedy = "rebuild the state from the stored history";
  if (bytes.size() < magic.size() + digest_size || bytes.substr(0, magic.size()) != magic) {
    return refuse("the bytes are not a strategy's state", remedy);
  }
  const std::string_view stated = bytes.substr(bytes.size() - digest_size);
  std::string_view rest = bytes.substr(0, bytes.size() - digest_size);
  if (sha256_bytes(rest) != stated) return refuse("the state's bytes do not match their SHA-256", remedy);
  rest.remove_prefix(magic.size());

  StateBytes state;
  std::uint32_t rule_size = 0;
  std::uint64_t count = 0;
  if (!take(rest, state.format) || !take(rest, rule_size) || !take(rest, rule_size, state.rule) ||
      !take(rest, state.m) || !take(rest, digest_size, state.choice_digest) || !take(rest, state.days) ||
      !take(rest, count) || rest.size() % sizeof(double) != 0 || count != rest.size() / sizeof(double)) {
    return refuse("the state's lengths contradict each other", remedy);
  }
  state.values.resize(static_cast<std::size_t>(count));
  for (double& value : state.values) {
    std::uint64_t word = 0;
    take(rest, word);
    value = std::bit_cast<double>(word);
  }
  return state;
}

}  // namespace nightweigh::strategies

#include "strategies/interface/choice.h"

#include <array>
#include <charconv>

#include "strategies/digest/sha256.h"

namespace nightweigh::strategies {

namespace {

std::string shortest(double value) {
  std::array<char, 32> text{};
  const auto end = std::to_chars(text.data(), text.data() + text.size(), value).ptr;
  return {text.data(), end};
}

}  // namespace

std::string Choice::canonical_text() const {
  std::string text = "rule=" + rule + ";m=" + std::to_string(m);
  if (rule == "exponentiated_gradient") text += ";eta=" + shortest(eta);
  if (rule == "constant_mix") {
    text += ";weights=";
    for (const double weight : weights) text += shortest(weight) + ",";
  }
  return text;
}

std::string Choice::digest() const {
  return sha256_bytes(canonical_text());
}

}  // namespace nightweigh::strategies

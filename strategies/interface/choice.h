// Which rule a book runs, with its parameters, as plain values.
#pragma once

#include <string>
#include <vector>

namespace nightweigh::strategies {

struct Choice {
  std::string rule;             // exponentiated_gradient | constant_mix | buy_and_hold
  std::size_t m = 0;            // lines, >= 1
  double eta = 0.05;            // exponentiated_gradient; > 0, <= 1
  std::vector<double> weights;  // constant_mix: m values on the simplex; empty = equal

  // Canonical text of what decides the rule's behaviour, and its SHA-256 (32 bytes): saved states carry
  // it, so that a state is never loaded under other parameters.
  std::string canonical_text() const;
  std::string digest() const;
};

}  // namespace nightweigh::strategies

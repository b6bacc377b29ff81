#include <algorithm>
#include <array>
#include <charconv>
#include <cmath>
#include <set>

#include "daemon/settings/sections.h"

namespace nightweigh::settings {

namespace {

// Weights in a file are written by people: they may miss 1 by this much, and are then normalised.
constexpr double weight_sum_tolerance = 1e-9;

struct KeyOfRule {
  const char* key;
  const char* rule;  // empty: of every rule
  OffValue off;      // of keys that are not built
};

// What this version does not have. These keys may stand at their off value under any rule.
const std::array<KeyOfRule, 9>& keys_to_come() {
  static const std::array<KeyOfRule, 9> all = {
      {{"alpha", "universal", OffValue::nothing()},
       {"tolerance", "universal", OffValue::nothing()},
       {"seed", "universal", OffValue::nothing()},
       {"engine", "universal", OffValue::nothing()},
       {"cost_aware", "universal", OffValue::no()},
       {"tuned_for_days", "exponentiated_gradient", OffValue::nothing()},
       {"staged", "exponentiated_gradient", OffValue::no()},
       {"start_weights", "", OffValue::nothing()},
       {"learn_from", "", OffValue::nothing()}}};
  return all;
}

void refuse_of_other_rule(const Value& value, const std::string& owner, const std::string& rule,
                          Problems& problems) {
  refuse(problems, value, "belongs to the rule " + owner + ", not to " + rule, "remove it");
}

std::string shortest(double value) {
  std::array<char, 32> text{};
  const auto end = std::to_chars(text.data(), text.data() + text.size(), value).ptr;
  return {text.data(), end};
}

// A weight for every line of the mix and for nothing else, with sum 1.
std::map<std::string, double> read_weights(const Value& value, const BookSettings& book, Problems& problems) {
  const std::vector<std::string> lines = mix_lines(book);
  std::set<std::string> missing(lines.begin(), lines.end());
  const std::set<std::string> known = missing;
  std::map<std::string, double> weights;
  const std::string remedy = "write a weight for each line, like {ALDER: 0.5, BRINE: 0.3, COPPER: 0.2}";
  const MapReader map(value, problems, remedy);
  if (!map.is_map() || book.instruments.empty()) return weights;
  const std::size_t before = problems.count();
  for (const Entry& entry : value.node->entries) {
    const std::string path = joined(value.path, entry.key);
    missing.erase(entry.key);
    if (!known.contains(entry.key)) {
      const bool cash = entry.key == cash_line;
      problems.add(entry.at, path,
                   cash ? "is a line of the mix only with cash.in_mix: true" : "is no line of the book's mix",
                   entry.key,
                   cash ? "remove it, or set cash.in_mix: true" : "name only instruments of the book");
      continue;
    }
    const auto weight = read_number({&entry.value, path}, {0, 1, false, false, "from 0 to 1"}, problems);
    if (weight) weights[entry.key] = *weight;
  }
  if (!missing.empty()) {
    std::string names;
    for (const std::string& name : missing) names += (names.empty() ? "" : ", ") + name;
    problems.add(value.node->at, value.path, "lacks a weight for lines of the mix", names,
                 "write 0 for a line that is to have none");
  }
  if (problems.count() != before) return weights;
  double sum = 0;
  for (const auto& [line, weight] : weights) sum += weight;
  if (!(std::abs(sum - 1) <= weight_sum_tolerance)) {
    problems.add(value.node->at, value.path, "do not sum to 1", shortest(sum), "change them so that they do");
    return weights;
  }
  for (auto& [line, weight] : weights) weight /= sum;
  return weights;
}

}  // namespace

std::vector<std::string> mix_lines(const BookSettings& book) {
  std::vector<std::string> lines;
  lines.reserve(book.line_count());
  for (const Instrument& instrument : book.instruments) lines.push_back(instrument.id);
  if (book.cash.in_mix) lines.emplace_back(cash_line);
  return lines;
}

StrategySettings read_strategy(MapReader strategy, const BookSettings& book, const Context& context) {
  Problems& problems = context.problems;
  StrategySettings out;
  const std::vector<std::string> rules = {"universal", "exponentiated_gradient", "constant_mix",
                                          "buy_and_hold"};
  const auto value =
      strategy.required("rule", "write rule: exponentiated_gradient, constant_mix or buy_and_hold");
  const auto rule = value ? read_word(*value, rules, problems) : std::nullopt;
  out.rule = rule.value_or("");
  const bool rule_to_come = out.rule == "universal";
  if (rule_to_come) {
    refuse(problems, *value,
           "is not in this version, which accepts only exponentiated_gradient, constant_mix and buy_and_hold",
           "choose one of these", ErrorKind::not_built);
  }

  const auto eta = strategy.optional("eta");
  if (eta && out.rule == "exponentiated_gradient") {
    out.eta = read_number(*eta, {0, 1, true, false, "above 0 and at most 1"}, problems).value_or(out.eta);
  } else if (eta && rule) {
    refuse_of_other_rule(*eta, "exponentiated_gradient", *rule, problems);
  }
  const auto weights = strategy.optional("weights");
  if (weights && out.rule == "constant_mix") {
    out.weights = read_weights(*weights, book, problems);
  } else if (weights && rule) {
    refuse_of_other_rule(*weights, "constant_mix", *rule, problems);
  } else if (out.rule == "constant_mix") {
    const std::vector<std::string> lines = mix_lines(book);
    for (const std::string& line : lines) out.weights[line] = 1.0 / static_cast<double>(lines.size());
  }

  for (const KeyOfRule& known : keys_to_come()) {
    const std::string owner = known.rule;
    if (!rule || rule_to_come) {
      strategy.optional(known.key);  // the rule itself has been refused: its keys are not the point
    } else if (owner.empty() || owner == *rule) {
      strategy.accept_only(known.key, known.off);
    } else if (const auto other = strategy.optional(known.key)) {
      if (other->node->kind != Node::Kind::broken && !known.off.matches(*other->node)) {
        refuse_of_other_rule(*other, owner, *rule, problems);
      }
    }
  }
  strategy.finish();
  return out;
}

}  // namespace nightweigh::settings

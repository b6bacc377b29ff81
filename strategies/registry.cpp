#include "strategies/registry.h"

#include <array>

#include "strategies/exponentiated_gradient/exponentiated_gradient.h"
#include "strategies/plain/buy_and_hold.h"
#include "strategies/plain/constant_mix.h"

namespace nightweigh::strategies {

namespace {

struct Rule {
  std::string_view name;
  Outcome<std::unique_ptr<Strategy>> (*make)(const Choice&);
  Outcome<std::unique_ptr<Strategy>> (*load)(const Choice&, std::string_view);
};

constexpr std::array all_rules = {
    Rule{"exponentiated_gradient", &ExponentiatedGradient::make, &ExponentiatedGradient::load},
    Rule{"constant_mix", &ConstantMix::make, &ConstantMix::load},
    Rule{"buy_and_hold", &BuyAndHold::make, &BuyAndHold::load},
};

Outcome<const Rule*> find_rule(const std::string& name) {
  std::string known;
  for (const Rule& rule : all_rules) {
    if (rule.name == name) return &rule;
    known += (known.empty() ? "" : ", ") + std::string(rule.name);
  }
  return refuse("there is no rule \"" + name + "\"", "choose one of " + known);
}

}  // namespace

std::vector<std::string_view> rules() {
  std::vector<std::string_view> names;
  for (const Rule& rule : all_rules) names.push_back(rule.name);
  return names;
}

Outcome<std::unique_ptr<Strategy>> make_strategy(const Choice& choice) {
  const Outcome<const Rule*> rule = find_rule(choice.rule);
  if (!rule) return tl::unexpected<Refusal>(rule.error());
  return (*rule)->make(choice);
}

Outcome<std::unique_ptr<Strategy>> load_strategy(const Choice& choice, std::string_view bytes) {
  const Outcome<const Rule*> rule = find_rule(choice.rule);
  if (!rule) return tl::unexpected<Refusal>(rule.error());
  return (*rule)->load(choice, bytes);
}

}  // namespace nightweigh::strategies

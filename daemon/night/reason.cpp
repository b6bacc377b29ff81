#include "daemon/night/reason.h"

#include <fmt/format.h>

#include <algorithm>
#include <cmath>

namespace nightweigh::night {

namespace {

constexpr double trading_days_a_year = 252.0;

std::string percent(double weight) {
  return fmt::format("{:.1f} %", 100 * weight);
}
// Two digits after the point; small amounts keep two digits that say something.
std::string basis_points(double fraction) {
  const double bp = 1e4 * fraction;
  if (std::abs(bp) < 1e-4) return "less than 0.0001 bp";
  return std::abs(bp) < 0.1 ? fmt::format("{:.2g} bp", bp) : fmt::format("{:.2f} bp", bp);
}

std::string trading_days(double days) {
  const double whole = std::ceil(days);
  if (!(whole > 0)) return "at once";
  return whole <= 1 ? "in 1 trading day" : fmt::format("in {:.0f} trading days", whole);
}

std::string figures_in_words(const gate::Worth& worth, bool saving_is_known) {
  const std::string cost = worth.cost > 0 ? fmt::format(" Cost {} once.", basis_points(worth.cost))
                                          : std::string(" It costs nothing.");
  if (!saving_is_known) {
    return cost + " What it saves and when it pays back cannot be said before the lines have moved.";
  }
  if (!(worth.growth_saved > 0) || !worth.payback_days) return cost + " It saves no growth.";
  const bool has_horizon = worth.horizon_days && *worth.horizon_days > 0;
  return cost +
         fmt::format(
             " Saves {} of growth a year if the wanted mix is the right one. Pays back {}; horizon {}.",
             basis_points(worth.growth_saved * trading_days_a_year), trading_days(*worth.payback_days),
             has_horizon ? fmt::format("{:.0f} days", std::ceil(*worth.horizon_days)) : std::string("none"));
}

std::string verdict_word(bool pays) {
  return pays ? "move" : "stay";
}

// "The verdict would be the same with costs halved, and `stay` with costs doubled."
std::string with_other_costs(const gate::Problem& problem, bool pays) {
  const bool halved = gate::pays_with_costs_times(problem, 0.5),
             doubled = gate::pays_with_costs_times(problem, 2.0);
  const auto word = [&](bool other) {
    return other == pays ? std::string("the same") : "`" + verdict_word(other) + "`";
  };
  if (halved == doubled) return " The verdict would be " + word(halved) + " with costs halved or doubled.";
  return fmt::format(" The verdict would be {} with costs halved, and {} with costs doubled.", word(halved),
                     word(doubled));
}

std::string price(const Decimal& close, double factor) {
  const double value = close.to_double() * factor;
  return fmt::format("{:.{}f}", value, std::max(2, std::min(close.scale(), 6)));
}

// The line that stands furthest on its way to an edge.
std::optional<std::size_t> nearest_line(const std::vector<gate::Edges>& edges, std::size_t instruments) {
  std::optional<std::size_t> nearest;
  for (std::size_t line = 0; line < std::min(edges.size(), instruments); ++line) {
    if (!edges[line].weight_below && !edges[line].weight_above) continue;
    if (!nearest || edges[line].way_to_edge > edges[*nearest].way_to_edge) nearest = line;
  }
  return nearest;
}

std::string between(const gate::Edges& edges) {
  if (edges.weight_below && edges.weight_above) {
    return fmt::format("no trade between {:.1f} and {:.1f}", 100 * *edges.weight_below,
                       100 * *edges.weight_above);
  }
  if (edges.weight_above) return fmt::format("no trade below {:.1f}", 100 * *edges.weight_above);
  return fmt::format("no trade above {:.1f}", 100 * *edges.weight_below);
}

std::string stay_inside(const Evidence& evidence, const gate::Problem& problem, const ClosesOfTheDay& closes,
                        const BookSettings& settings) {
  const std::optional<std::size_t> line = nearest_line(evidence.edges, settings.instruments.size());
  if (!line) return " The holdings are at the wanted mix; there is nothing to trade.";
  const gate::Edges& edges = evidence.edges[*line];
  std::string text =
      fmt::format(" Held {} {}, wanted {}, {}. It is the nearest line, {}", settings.line_name(*line),
                  percent(evidence.held_after[*line]), percent(evidence.wanted[*line]), between(edges),
                  edges.way_to_edge < 0.95 ? fmt::format("{:.1f} of the way to its edge", edges.way_to_edge)
                                           : std::string("just inside its edge"));
  const gate::Triggers triggers = gate::triggers(problem, evidence.decision.penalty, *line);
  // The nearer of the two closes, in ratio.
  std::optional<double> factor = triggers.factor_above;
  if (triggers.factor_below && (!factor || 1 / *triggers.factor_below < *factor))
    factor = triggers.factor_below;
  if (factor) {
    text += fmt::format("; with all else unchanged, a close of {} near {} would move it",
                        settings.line_name(*line), price(closes.closes[*line]->close, *factor));
  }
  return text + ".";
}

}  // namespace

std::string reason_in_words(const Evidence& evidence, const gate::Problem& problem,
                            const ClosesOfTheDay& closes, const BookSettings& settings) {
  std::string text = std::string(name_of(evidence.verdict)) + ".";
  if (evidence.verdict == Verdict::withheld) {
    return text + " The rule has learned tonight and the holdings are marked, but no sheet is made.";
  }
  const std::string figures = evidence.shown_worth()
                                  ? figures_in_words(*evidence.shown_worth(), evidence.saving_is_known)
                                  : std::string();
  if (evidence.verdict == Verdict::move) {
    if (settings.gate.always) {
      return text + " This book trades to the wanted mix every night, whatever it costs." + figures;
    }
    return text + figures + with_other_costs(problem, true);
  }

  if (settings.strategy.rule == "buy_and_hold" && evidence.held_after == evidence.wanted) {
    return text + " The wanted mix is the held one: buy and hold trades once, to its first mix.";
  }
  if (evidence.below_one_lot) return text + " The best move is smaller than one lot in every line." + figures;
  if (evidence.sized) return text + " The best move would pay, but in whole lots it does not." + figures;
  switch (evidence.decision.worth.reason) {
    case gate::Worth::Reason::horizon_too_short:
      return text +
             fmt::format(
                 " A line has left its band, but the move would not earn its cost with a margin of {:.0f} %.",
                 100 * settings.gate.extra_gain) +
             figures + with_other_costs(problem, false);
    case gate::Worth::Reason::payback_too_long:
      return text +
             fmt::format(
                 " A line has left its band, but the move would take longer to pay back than the {:g} "
                 "trading "
                 "days that the settings allow.",
                 settings.gate.payback_days_max.value_or(0)) +
             figures + with_other_costs(problem, false);
    case gate::Worth::Reason::no_saving:
      return text + " The best move saves no growth." + with_other_costs(problem, false);
    case gate::Worth::Reason::nothing_to_trade:
    case gate::Worth::Reason::pays:
      break;
  }
  return text + stay_inside(evidence, problem, closes, settings) + with_other_costs(problem, false);
}

}  // namespace nightweigh::night

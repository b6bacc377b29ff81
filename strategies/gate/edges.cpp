#include <algorithm>
#include <cmath>
#include <limits>

#include "strategies/gate/dense.h"
#include "strategies/gate/descent.h"
#include "strategies/gate/gate.h"

namespace nightweigh::gate {
namespace {

constexpr double factor_max = 4.0;

// The weight of a line at `a` after its close has moved by `factor`, and back.
double weight_at(double a, double factor) {
  return a * factor / (1.0 + a * (factor - 1.0));
}
double factor_at(double a, double weight) {
  return weight * (1.0 - a) / (a * (1.0 - weight));
}

// The holdings when the line stands at `weight`, the others in their old proportions.
Eigen::VectorXd held_at(const Eigen::VectorXd& held, Eigen::Index line, double weight) {
  Eigen::VectorXd out = held * ((1.0 - weight) / (1.0 - held[line]));
  out[line] = weight;
  return out;
}

// The slopes of all lines along one line's path, as linear functions of the way s - a_i that its weight has
// gone. The excess (steepest sale less steepest purchase) is the largest of linear functions, so it is convex
// in s, and the region is the interval where it is not above 0.
class Path {
 public:
  // gradient = M (a - b), pull = M a.
  Path(const Problem& problem, const Penalty& penalty, const Eigen::VectorXd& gradient,
       const Eigen::VectorXd& pull, Eigen::Index line)
      : problem_(problem), gradient_(gradient), at_(problem.held[line]) {
    // a(s) = s e_i + (1-s) u, u = the others by themselves: the slopes change by M (e_i - u) a unit.
    const double rest = 1.0 - at_;
    change_ = penalty.matrix.col(line) - (pull - at_ * penalty.matrix.col(line)) / rest;
  }

  // The first weight from here towards `limit` (0 or 1) beyond which the region is left; nullopt: none.
  // Newton on a convex piecewise linear function from outside: it meets the edge after finitely many pieces.
  std::optional<double> edge_towards(double limit) const {
    double way = limit - at_;
    for (Eigen::Index piece = 0; piece <= problem_.held.size() * 2; ++piece) {
      const Line steepest = excess(way);
      if (!(steepest.here + steepest.change * way > 0.0)) {
        return piece == 0 ? std::nullopt : std::optional<double>(at_ + way);
      }
      const double next = -steepest.here / steepest.change;  // here <= 0: between 0 and way
      if (!(std::abs(next) < std::abs(way))) {
        break;
      }
      way = next;
    }
    return at_ + way;
  }

 private:
  struct Line {
    double here;    // at s = a_i
    double change;  // a unit of s
  };

  Line excess(double way) const {
    double sell_best = -std::numeric_limits<double>::infinity();
    double buy_best = std::numeric_limits<double>::infinity();
    Line sell{};
    Line buy{};
    for (Eigen::Index k = 0; k < change_.size(); ++k) {
      const auto line = static_cast<std::size_t>(k);
      if (problem_.held[k] > 0.0) {
        const Line slope{gradient_[k] - problem_.costs.sell[line], change_[k]};
        if (slope.here + slope.change * way > sell_best) {
          sell_best = slope.here + slope.change * way;
          sell = slope;
        }
      }
      const Line slope{gradient_[k] + problem_.costs.buy[line], change_[k]};
      if (slope.here + slope.change * way < buy_best) {
        buy_best = slope.here + slope.change * way;
        buy = slope;
      }
    }
    return {std::min(sell.here - buy.here, 0.0), sell.change - buy.change};
  }

  const Problem& problem_;
  const Eigen::VectorXd& gradient_;
  Eigen::VectorXd change_;
  double at_;
};

// A line at 0 or 1 has no path: its weight does not answer to its close.
bool has_path(double held) {
  return held > 0.0 && held < 1.0;
}

// What all lines' paths share.
class Look {
 public:
  Look(const Problem& problem, const Penalty& penalty) : problem_(problem), penalty_(penalty) {
    const Eigen::Index m = problem.held.size();
    require_shapes(penalty.matrix.rows() == m && penalty.matrix.cols() == m && problem.wanted.size() == m &&
                       static_cast<Eigen::Index>(problem.costs.buy.size()) == m &&
                       static_cast<Eigen::Index>(problem.costs.sell.size()) == m,
                   "gate::edges: penalty, weights and costs differ in size");
    const Descent here(penalty.matrix, problem.held, problem.wanted, problem.costs, problem.held);
    inside_ = !(here.steepest().slope > here.tolerance());
    const Eigen::VectorXd apart = problem.held - problem.wanted;
    gradient_ = product(penalty.matrix, apart);
    pull_ = product(penalty.matrix, problem.held);
  }

  // O(m) a piece of the path; few pieces.
  Edges edges_of(Eigen::Index line) const {
    Edges out;
    const double a = problem_.held[line];
    if (!inside_) {
      out.way_to_edge = 1.0;
      return out;
    }
    if (!has_path(a)) {
      return out;
    }
    const Path path(problem_, penalty_, gradient_, pull_, line);
    const std::optional<double> below = path.edge_towards(0.0);
    const std::optional<double> above = path.edge_towards(1.0);
    if (below && factor_at(a, *below) >= 1.0 / factor_max) {
      out.weight_below = below;
      out.factor_below = factor_at(a, *below);
    }
    if (above && factor_at(a, *above) <= factor_max) {
      out.weight_above = above;
      out.factor_above = factor_at(a, *above);
    }
    out.way_to_edge = way_to_edge(a, problem_.wanted[line], below, above);
    return out;
  }

 private:
  static double way_to_edge(double held, double wanted, std::optional<double> below,
                            std::optional<double> above) {
    const double low = below.value_or(0.0);
    const double high = above.value_or(1.0);
    const double middle = wanted > low && wanted < high ? wanted : 0.5 * (low + high);
    double way = 0.0;
    if (held > middle && above) {
      way = (held - middle) / (high - middle);
    } else if (held < middle && below) {
      way = (middle - held) / (middle - low);
    }
    return std::clamp(way, 0.0, 1.0);
  }

  const Problem& problem_;
  const Penalty& penalty_;
  bool inside_ = false;
  Eigen::VectorXd gradient_;  // M (a - b)
  Eigen::VectorXd pull_;      // M a
};

std::optional<double> trigger_towards(const Problem& problem, const Penalty& penalty, Eigen::Index line,
                                      double limit) {
  const double a = problem.held[line];
  Problem moved = problem;
  const auto pays_at = [&](double weight) {
    moved.held = held_at(problem.held, line, weight);
    const Move move = best_move(penalty.matrix, moved.held, moved.wanted, moved.costs);
    return worth(moved, penalty, move.weights).pays;
  };
  // Ever longer ways from here, so that the nearest answer is met first; then halving.
  double stays = a;
  std::optional<double> pays;
  for (int k = 10; k >= 0 && !pays; --k) {
    const double weight = a + (limit - a) * std::ldexp(1.0, -k);
    if (pays_at(weight)) {
      pays = weight;
    } else {
      stays = weight;
    }
  }
  if (!pays) {
    return std::nullopt;
  }
  while (std::abs(*pays - stays) > 1e-10 * std::min(a, 1.0 - a)) {
    const double between = 0.5 * (*pays + stays);
    if (between == *pays || between == stays) {
      break;
    }
    if (pays_at(between)) {
      pays = between;
    } else {
      stays = between;
    }
  }
  return factor_at(a, *pays);
}

}  // namespace

std::vector<Edges> all_edges(const Problem& problem, const Penalty& penalty) {
  const Look look(problem, penalty);
  std::vector<Edges> out;
  for (Eigen::Index i = 0; i < problem.held.size(); ++i) {
    out.push_back(look.edges_of(i));
  }
  return out;
}

Edges edges(const Problem& problem, const Penalty& penalty, std::size_t line) {
  require_shapes(line < static_cast<std::size_t>(problem.held.size()), "gate::edges: no such line");
  return Look(problem, penalty).edges_of(static_cast<Eigen::Index>(line));
}

Triggers triggers(const Problem& problem, const Penalty& penalty, std::size_t line) {
  const auto i = static_cast<Eigen::Index>(line);
  require_shapes(i < problem.held.size(), "gate::triggers: no such line");
  const double a = problem.held[i];
  Triggers out;
  if (has_path(a)) {
    out.factor_below = trigger_towards(problem, penalty, i, weight_at(a, 1.0 / factor_max));
    out.factor_above = trigger_towards(problem, penalty, i, weight_at(a, factor_max));
  }
  return out;
}

}  // namespace nightweigh::gate

#include "strategies/costs/self_financing.h"

#include <algorithm>
#include <cstddef>
#include <iterator>
#include <limits>
#include <stdexcept>

#include "strategies/numerics/numerics.h"

namespace nightweigh::costs {
namespace {

// The equation between two neighbouring bends: every line either buys or sells on the whole piece.
class Piecewise {
 public:
  Piecewise(std::span<const double> a, std::span<const double> w, const Proportional& costs, double fees)
      : a_(a), w_(w), costs_(costs), fees_(fees), bend_(a.size()), terms_(a.size()) {
    for (std::size_t i = 0; i < a.size(); ++i) {
      // A line that is not wanted is sold at every nu.
      bend_[i] = w[i] > 0.0 ? a[i] / w[i] : std::numeric_limits<double>::infinity();
    }
  }

  // The bends below 1, ascending, each once: the root is never above 1.
  std::vector<double> bends_below_one() const {
    std::vector<double> bends;
    std::copy_if(bend_.begin(), bend_.end(), std::back_inserter(bends), [](double at) { return at < 1.0; });
    std::sort(bends.begin(), bends.end());
    bends.erase(std::unique(bends.begin(), bends.end()), bends.end());
    return bends;
  }

  // nu - 1 + fees + costs at nu: negative below the root, positive above.
  double excess(double nu) {
    for (std::size_t i = 0; i < a_.size(); ++i) {
      const double bought = nu * w_[i] - a_[i];
      terms_[i] = bought > 0.0 ? costs_.buy[i] * bought : costs_.sell[i] * -bought;
    }
    return (nu - 1.0) + (fees_ + numerics::sum(terms_));
  }

  // 1 - root, where the root lies on the piece just below `upper`: lines that bend at or above it sell,
  // the others buy. On the piece excess(nu) = excess'(1) + slope (nu - 1), so the loss is a ratio of two sums
  // and nothing of size 1 is subtracted.
  double loss_below(double upper) {
    std::vector<double> slopes(a_.size());
    for (std::size_t i = 0; i < a_.size(); ++i) {
      const bool sells = bend_[i] >= upper;
      const double rate = sells ? -costs_.sell[i] : costs_.buy[i];
      slopes[i] = rate * w_[i];
      terms_[i] = rate * (w_[i] - a_[i]);
    }
    return (fees_ + numerics::sum(terms_)) / (1.0 + numerics::sum(slopes));
  }

 private:
  std::span<const double> a_;
  std::span<const double> w_;
  const Proportional& costs_;
  double fees_;
  std::vector<double> bend_;
  std::vector<double> terms_;
};

}  // namespace

double self_financing_loss(std::span<const double> a, std::span<const double> w, const Proportional& costs,
                           double fees) {
  if (w.size() != a.size() || costs.buy.size() != a.size() || costs.sell.size() != a.size()) {
    throw std::logic_error("self_financing_loss: weights and costs differ in size");
  }
  Piecewise equation(a, w, costs, fees);
  const std::vector<double> bends = equation.bends_below_one();
  // The first bend that is not below the root; the excess is increasing, so halving finds it.
  const auto above =
      std::partition_point(bends.begin(), bends.end(), [&](double nu) { return equation.excess(nu) < 0.0; });
  const double loss = equation.loss_below(above == bends.end() ? 1.0 : *above);
  return std::max(loss, 0.0);  // rounding alone could leave a wealth above what there was
}

double self_financing_factor(std::span<const double> a, std::span<const double> w, const Proportional& costs,
                             double fees) {
  return 1.0 - self_financing_loss(a, w, costs, fees);
}

double log_cost_of_loss(double loss) {
  if (loss > 0x1p-8) {
    return -numerics::log(1.0 - loss);
  }
  // -log(1 - x) = x + x^2/2 + x^3/3 + ...; below 2^-8 the first eight terms leave 2^-67 of the first.
  double sum = 1.0 / 8.0;
  for (int k = 7; k >= 1; --k) {
    sum = sum * loss + 1.0 / k;
  }
  return sum * loss;
}

}  // namespace nightweigh::costs

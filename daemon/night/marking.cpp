#include "daemon/night/marking.h"

namespace nightweigh::night {

std::vector<double> marked_weights(const ledger::Account& account, const std::vector<Decimal>& closes) {
  const double value = ledger::net_asset_value(account, closes).to_double();
  std::vector<double> weights(closes.size() + 1);
  for (std::size_t line = 0; line < closes.size(); ++line) {
    weights[line] = (account.quantities[line] * closes[line]).to_double() / value;
  }
  weights.back() = account.cash.to_double() / value;
  return weights;
}

Eigen::VectorXd to_eigen(const std::vector<double>& values) {
  Eigen::VectorXd out(static_cast<Eigen::Index>(values.size()));
  for (std::size_t i = 0; i < values.size(); ++i) out[static_cast<Eigen::Index>(i)] = values[i];
  return out;
}

std::vector<double> to_std(const Eigen::VectorXd& values) {
  std::vector<double> out(static_cast<std::size_t>(values.size()));
  for (std::size_t i = 0; i < out.size(); ++i) out[i] = values[static_cast<Eigen::Index>(i)];
  return out;
}

}  // namespace nightweigh::night

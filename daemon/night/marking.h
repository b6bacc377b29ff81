// Step 4 of the night: the account in weights.
#pragma once

#include <Eigen/Dense>
#include <vector>

#include "daemon/ledger/account.h"

namespace nightweigh::night {

// Share of the net asset value in each line, cash last; sums to 1 within rounding.
std::vector<double> marked_weights(const ledger::Account& account, const std::vector<Decimal>& closes);

// Copies into Eigen's own aligned storage; nothing here maps foreign memory.
Eigen::VectorXd to_eigen(const std::vector<double>& values);
std::vector<double> to_std(const Eigen::VectorXd& values);

}  // namespace nightweigh::night

#include "strategies/gate/covariation.h"

#include <algorithm>
#include <bit>
#include <cmath>
#include <limits>
#include <utility>

#include "strategies/gate/dense.h"
#include "strategies/numerics/numerics.h"

namespace nightweigh::gate {
namespace {

constexpr double shrinkage_days = 20.0;
constexpr double ridge = 1e-3;

constexpr std::string_view magic{"NWCOVAR\0", 8};
constexpr std::uint32_t format_number = 1;  // raised by one with every change of the bytes
constexpr std::uint32_t flag_absences = 1;
constexpr std::size_t header_bytes = 8 + 4 + 4 + 8 + 8 + 3 * 8;
constexpr std::uint64_t lines_max = 1u << 20;  // keeps every size below far from overflow

template <class Unsigned>
void put(std::string& bytes, Unsigned value) {
  for (std::size_t k = 0; k < sizeof(Unsigned); ++k) {
    bytes.push_back(static_cast<char>((value >> (8 * k)) & 0xff));
  }
}
void put(std::string& bytes, double value) {
  put(bytes, std::bit_cast<std::uint64_t>(value));
}

template <class Unsigned>
Unsigned take(std::string_view& bytes) {
  Unsigned value = 0;
  for (std::size_t k = 0; k < sizeof(Unsigned); ++k) {
    value |= static_cast<Unsigned>(static_cast<unsigned char>(bytes[k])) << (8 * k);
  }
  bytes.remove_prefix(sizeof(Unsigned));
  return value;
}
double take_double(std::string_view& bytes) {
  return std::bit_cast<double>(take<std::uint64_t>(bytes));
}

void put_triangle(std::string& bytes, const Eigen::MatrixXd& matrix) {
  for (Eigen::Index j = 0; j < matrix.cols(); ++j) {
    for (Eigen::Index i = j; i < matrix.rows(); ++i) {
      put(bytes, matrix(i, j));
    }
  }
}

// False where a value is not finite, or one on the diagonal is negative.
bool take_triangle(std::string_view& bytes, Eigen::MatrixXd& matrix) {
  bool sound = true;
  for (Eigen::Index j = 0; j < matrix.cols(); ++j) {
    for (Eigen::Index i = j; i < matrix.rows(); ++i) {
      const double value = take_double(bytes);
      sound = sound && std::isfinite(value) && (i != j || value >= 0.0);
      matrix(i, j) = value;
      matrix(j, i) = value;
    }
  }
  return sound;
}

// The nearest positive semidefinite matrix in the Frobenius norm: negative eigenvalues become 0 (Higham,
// Linear Algebra Appl. 103, 1988).
void project_to_semidefinite(Eigen::MatrixXd& s) {
  const Eigen::SelfAdjointEigenSolver<Eigen::MatrixXd> solver(s);
  const Eigen::VectorXd& values = solver.eigenvalues();  // ascending
  const Eigen::MatrixXd& vectors = solver.eigenvectors();
  if (!(values[0] < 0.0)) {
    return;
  }
  // Take the negative part away: it has few vectors, and the rest of the matrix keeps its bits.
  for (Eigen::Index k = 0; k < values.size() && values[k] < 0.0; ++k) {
    for (Eigen::Index j = 0; j < s.cols(); ++j) {
      for (Eigen::Index i = j; i < s.rows(); ++i) {
        s(i, j) -= values[k] * (vectors(i, k) * vectors(j, k));
      }
    }
  }
  for (Eigen::Index j = 0; j < s.cols(); ++j) {
    for (Eigen::Index i = j; i < s.rows(); ++i) {
      s(j, i) = s(i, j);
    }
  }
}

// Lines that were never there get the mean variance of the others, so that not knowing a line never makes
// it look free of risk.
void fill_unknown(Eigen::MatrixXd& s, const Eigen::MatrixXd& pair_weights) {
  double total = 0.0;
  double known = 0.0;
  for (Eigen::Index i = 0; i < s.rows(); ++i) {
    if (pair_weights(i, i) > 0.0) {
      total += s(i, i);
      known += 1.0;
    }
  }
  for (Eigen::Index i = 0; i < s.rows(); ++i) {
    if (!(pair_weights(i, i) > 0.0)) {
      s(i, i) = known > 0.0 ? total / known : 0.0;
    }
  }
}

}  // namespace

Covariation::Covariation(std::size_t m, double half_life_days) {
  require_shapes(m >= 1 && m <= lines_max, "gate::Covariation: no lines, or too many");
  require_shapes(half_life_days > 0.0, "gate::Covariation: the half-life must be positive");
  decay_ = numerics::exp(-numerics::log(2.0) / half_life_days);
  const auto n = static_cast<Eigen::Index>(m);
  sums_ = Eigen::MatrixXd::Zero(n, n);
}

double Covariation::effective_days() const {
  return weight_squares_ > 0.0 ? weight_ * weight_ / weight_squares_ : 0.0;
}

void Covariation::weigh_pairs() {
  if (pair_weights_.rows() == 0) {
    pair_weights_ = Eigen::MatrixXd::Constant(sums_.rows(), sums_.cols(), weight_);
  }
}

void Covariation::learn(std::span<const double> relatives, std::span<const std::uint8_t> absent) {
  require_shapes(relatives.size() == size() && absent.size() == size(),
                 "gate::Covariation::learn: the day has another number of lines");
  if (std::any_of(absent.begin(), absent.end(), [](std::uint8_t is) { return is != 0; })) {
    weigh_pairs();
  }
  const Eigen::Index m = sums_.rows();
  Eigen::VectorXd moves(m);
  Eigen::VectorXd there(m);
  for (Eigen::Index i = 0; i < m; ++i) {
    const auto line = static_cast<std::size_t>(i);
    there[i] = absent[line] != 0 ? 0.0 : 1.0;
    moves[i] = absent[line] != 0 ? 0.0 : relatives[line] - 1.0;
  }
  for (Eigen::Index j = 0; j < m; ++j) {
    for (Eigen::Index i = 0; i < m; ++i) {
      sums_(i, j) = decay_ * sums_(i, j) + moves[i] * moves[j];
    }
  }
  if (pair_weights_.rows() != 0) {
    for (Eigen::Index j = 0; j < m; ++j) {
      for (Eigen::Index i = 0; i < m; ++i) {
        pair_weights_(i, j) = decay_ * pair_weights_(i, j) + there[i] * there[j];
      }
    }
  }
  weight_ = decay_ * weight_ + 1.0;
  weight_squares_ = (decay_ * decay_) * weight_squares_ + 1.0;
  ++days_;
}

Eigen::MatrixXd Covariation::estimate() const {
  const Eigen::Index m = sums_.rows();
  if (days_ == 0) {
    return Eigen::MatrixXd::Identity(m, m);
  }
  Eigen::MatrixXd s(m, m);
  if (pair_weights_.rows() == 0) {
    s = sums_ / weight_;
  } else {
    fix_eigen_blocking();
    for (Eigen::Index j = 0; j < m; ++j) {
      for (Eigen::Index i = 0; i < m; ++i) {
        s(i, j) = pair_weights_(i, j) > 0.0 ? sums_(i, j) / pair_weights_(i, j) : 0.0;
      }
    }
    fill_unknown(s, pair_weights_);
    project_to_semidefinite(s);
  }
  const double trace = sum(s.diagonal());
  if (!(trace > 0.0)) {
    return Eigen::MatrixXd::Identity(m, m);
  }
  const double lines = static_cast<double>(m);
  if (m > 1) {
    const Eigen::VectorXd row_sums = product(s, Eigen::VectorXd::Ones(m));
    const double across = std::max((trace - sum(row_sums) / lines) / (lines - 1.0), 0.0);  // tau
    const double q = shrinkage_days / (shrinkage_days + effective_days());
    s *= 1.0 - q;
    s.diagonal().array() += q * across;
  }
  const double mean = sum(s.diagonal()) / lines;
  s.diagonal().array() += ridge * mean;
  return s;
}

std::string Covariation::save() const {
  const std::size_t m = size();
  const bool absences = pair_weights_.rows() != 0;
  std::string bytes;
  bytes.reserve(header_bytes + (absences ? 2 : 1) * m * (m + 1) / 2 * sizeof(double));
  bytes.append(magic);
  put(bytes, format_number);
  put(bytes, absences ? flag_absences : std::uint32_t{0});
  put(bytes, static_cast<std::uint64_t>(m));
  put(bytes, days_);
  put(bytes, decay_);
  put(bytes, weight_);
  put(bytes, weight_squares_);
  put_triangle(bytes, sums_);
  put_triangle(bytes, pair_weights_);
  return bytes;
}

bool Covariation::load(std::string_view bytes, Covariation& out) {
  if (bytes.size() < header_bytes || bytes.substr(0, magic.size()) != magic) {
    return false;
  }
  bytes.remove_prefix(magic.size());
  if (take<std::uint32_t>(bytes) != format_number) {
    return false;
  }
  const auto flags = take<std::uint32_t>(bytes);
  const auto m = take<std::uint64_t>(bytes);
  if ((flags & ~flag_absences) != 0 || m < 1 || m > lines_max) {
    return false;
  }
  Covariation read;
  read.days_ = take<std::uint64_t>(bytes);
  read.decay_ = take_double(bytes);
  read.weight_ = take_double(bytes);
  read.weight_squares_ = take_double(bytes);
  const std::uint64_t triangles = flags == flag_absences ? 2 : 1;
  if (bytes.size() != triangles * (m * (m + 1) / 2) * sizeof(double)) {
    return false;  // before any memory is taken for what the header claims
  }
  const auto in_range = [](double value, double low, double high) { return value >= low && value <= high; };
  const double most = std::numeric_limits<double>::max();
  if (!in_range(read.decay_, 0.0, 1.0) || !in_range(read.weight_, 0.0, most) ||
      !in_range(read.weight_squares_, 0.0, most) || (read.days_ == 0) != (read.weight_ == 0.0)) {
    return false;
  }
  const auto n = static_cast<Eigen::Index>(m);
  read.sums_.resize(n, n);
  if (!take_triangle(bytes, read.sums_)) {
    return false;
  }
  if (flags == flag_absences) {
    read.pair_weights_.resize(n, n);
    if (!take_triangle(bytes, read.pair_weights_)) {
      return false;
    }
  }
  out = std::move(read);
  return true;
}

}  // namespace nightweigh::gate

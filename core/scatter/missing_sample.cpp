#include "core/scatter/missing_sample.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <limits>

namespace tailweir {

MissingSample::MissingSample(Index dimension)
    : dimension_(dimension),
      rhs_(dimension),
      columns_(dimension, dimension),
      block_(dimension, dimension),
      factor_(dimension, dimension),
      update_(dimension, dimension),
      removal_(dimension, dimension) {
  missing_.reserve(static_cast<std::size_t>(dimension));
}

// columns_ <- P E_m, block_ <- P_mm (whole), both in the first |m| columns.
void MissingSample::gather(const spd::ConstMatrixRef& precision,
                           const std::vector<Index>& missing) {
  const Index m = static_cast<Index>(missing.size());
  for (Index k = 0; k < m; ++k) {
    const Index j = missing[static_cast<std::size_t>(k)];
    for (Index i = 0; i < j; ++i) columns_(i, k) = precision(j, i);
    for (Index i = j; i < dimension_; ++i) columns_(i, k) = precision(i, j);
  }
  for (Index k = 0; k < m; ++k) {
    for (Index l = 0; l < m; ++l) block_(l, k) = columns_(missing[static_cast<std::size_t>(l)], k);
  }
}

double MissingSample::impute(const spd::ConstMatrixRef& precision, double* x, double* direction) {
  Eigen::Map<Eigen::VectorXd> sample(x, dimension_);
  rhs_ = sample;
  for (Index i = 0; i < dimension_; ++i) {
    if (std::isnan(x[i])) rhs_(i) = 0;
  }
  spd::symmetric_multiply(precision, rhs_.data(), direction);
  return impute_multiplied(precision, x, direction);
}

double MissingSample::impute_multiplied(const spd::ConstMatrixRef& precision, double* x,
                                        double* direction) {
  assert(precision.rows() == dimension_);
  missing_.clear();
  for (Index i = 0; i < dimension_; ++i) {
    if (std::isnan(x[i])) missing_.push_back(i);
  }
  const Index m = static_cast<Index>(missing_.size());
  Eigen::Map<Eigen::VectorXd> sample(x, dimension_), moved(direction, dimension_);
  if (m == 0) return std::max(sample.dot(moved), 0.);
  gather(precision, missing_);
  spd::MatrixRef block = block_.topLeftCorner(m, m);
  if (!spd::cholesky(block)) return std::numeric_limits<double>::quiet_NaN();
  for (Index k = 0; k < m; ++k) rhs_(k) = direction[missing_[static_cast<std::size_t>(k)]];
  spd::MatrixRef filled = rhs_.head(m);
  spd::solve(block, filled);
  spd::solve_transposed(block, filled);
  for (Index k = 0; k < m; ++k) {
    sample(missing_[static_cast<std::size_t>(k)]) = -rhs_(k);
    moved -= rhs_(k) * columns_.col(k);
  }
  for (const Index j : missing_) moved(j) = 0;
  // C = R^-T for P_mm = R R'.
  factor_.topLeftCorner(m, m).setIdentity();
  spd::MatrixRef factor = factor_.topLeftCorner(m, m);
  spd::solve_transposed(block, factor);
  update_.leftCols(m).noalias() = columns_.leftCols(m).lazyProduct(factor_.topLeftCorner(m, m));
  return std::max(sample.dot(moved), 0.);
}

Eigen::Ref<const Eigen::MatrixXd> MissingSample::conditional_factor() const {
  const Index m = static_cast<Index>(missing_.size());
  return factor_.topLeftCorner(m, m);
}

Eigen::Ref<const Eigen::MatrixXd> MissingSample::update() const {
  return update_.leftCols(static_cast<Index>(missing_.size()));
}

bool MissingSample::remove(const spd::ConstMatrixRef& precision, const std::vector<Index>& missing,
                           const Eigen::Ref<const Eigen::MatrixXd>& factor, double f) {
  const Index m = static_cast<Index>(missing.size());
  assert(factor.rows() == m && factor.cols() == m && f >= 0);
  removed_ = m;
  if (m == 0) return true;
  missing_.clear();  // update() is used as scratch below
  gather(precision, missing);
  // V = P E_m C, T = I - f C' P_mm C = R R'; P + f V T^-1 V' = P + U U', U = sqrt(f) V R^-T.
  removal_.leftCols(m).noalias() = columns_.leftCols(m).lazyProduct(factor);
  for (Index k = 0; k < m; ++k) {
    for (Index l = 0; l < m; ++l) {
      update_(l, k) = removal_(missing[static_cast<std::size_t>(l)], k);  // P_mm C
    }
  }
  block_.topLeftCorner(m, m).noalias() =
      factor.transpose().lazyProduct(update_.topLeftCorner(m, m));
  block_.topLeftCorner(m, m) *= -f;
  block_.topLeftCorner(m, m).diagonal().array() += 1;
  spd::MatrixRef block = block_.topLeftCorner(m, m);
  if (!spd::cholesky(block)) return false;
  const double root = std::sqrt(f);
  // Solves U R' = sqrt(f) V column by column, in place.
  for (Index k = 0; k < m; ++k) {
    for (Index l = 0; l < k; ++l) removal_.col(k) -= block_(k, l) * removal_.col(l);
    removal_.col(k) /= block_(k, k);
  }
  removal_.leftCols(m) *= root;
  return removal_.leftCols(m).allFinite();
}

Eigen::Ref<const Eigen::MatrixXd> MissingSample::removal() const {
  return removal_.leftCols(removed_);
}

}  // namespace tailweir

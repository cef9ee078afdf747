// What a tracker shows: scatter and centre, residuals of the sample at hand, the view per sample.
#include <cassert>
#include <cmath>

#include "core/scatter/tracker.h"
#include "core/scatter/tracker_internal.h"
#include "core/spd/blas.h"

namespace tailweir {

using namespace tracker_internal;

double Tracker::ring_share() const { return mass_ > 0 ? 1 - tail_mass_ / mass_ : 1; }

void Tracker::view_sample(Index k, Eigen::Ref<Eigen::VectorXd> x) const {
  const Eigen::Map<const Eigen::VectorXd> scaled(ring_.x(view_first_ + k), p_);
  x = scaled.cwiseProduct(unit_) + offset_;
}

void Tracker::residuals(Eigen::Ref<Eigen::VectorXd> q,
                        Eigen::Ref<Eigen::VectorXd> precision_diagonal) const {
  assert(tracking());
  for (Index j = 0; j < p_; ++j) {
    q(j) = total_ * y_[static_cast<std::size_t>(j)] / (unit_(j) * shrink_);
    precision_diagonal(j) = precision_.entry(j, j);
  }
  if (!missing_now_.empty()) {  // P_jj less what the missing ones explain
    const Eigen::Ref<const Eigen::MatrixXd> v = missing_.update();
    for (Index j = 0; j < p_; ++j) precision_diagonal(j) -= v.row(j).squaredNorm();
  }
  for (Index j = 0; j < p_; ++j) precision_diagonal(j) *= total_ / (unit_(j) * unit_(j));
  for (const Index j : missing_now_) precision_diagonal(j) = 1;
}

void Tracker::centred(Eigen::Ref<Eigen::VectorXd> x) const {
  for (Index j = 0; j < p_; ++j) x(j) = x_[static_cast<std::size_t>(j)] * unit_(j) / shrink_;
  if (lift_ == 0) return;
  // m - offset = -S (W P e_p): one solve with the leading block.
  precision_.copy_to(scratch_);
  block_ = scratch_.topLeftCorner(p_, p_);
  if (!spd::cholesky(block_)) return;
  column_ = -scratch_.row(p_).head(p_).transpose();
  spd::solve(block_, column_);
  spd::solve_transposed(block_, column_);
  x -= unit_.cwiseProduct(column_.col(0));
}

void Tracker::centred_roughly(Eigen::Ref<Eigen::VectorXd> x) const {
  for (Index j = 0; j < p_; ++j) {
    x(j) = (x_[static_cast<std::size_t>(j)] - shift_(j)) * unit_(j) / shrink_;
  }
}

bool Tracker::scatter(Eigen::MatrixXd& s, Eigen::VectorXd& m) const {
  if (tracking()) {
    precision_.settle();
    precision_.copy_to(scratch_);
    if (form_scatter(scratch_, total_, offset_, unit_, s, m)) return true;
  }
  return good_total_ > 0 && form_scatter(good_, good_total_, good_offset_, good_unit_, s, m);
}

// S and m from P, when they come out positive definite with digits to spare.
bool Tracker::form_scatter(const Eigen::MatrixXd& precision, double total,
                           const Eigen::VectorXd& offset, const Eigen::VectorXd& unit,
                           Eigen::MatrixXd& s, Eigen::VectorXd& m) const {
  block_ = precision.topLeftCorner(p_, p_);
  if (!spd::cholesky(block_)) return false;
  column_.setZero();
  if (lift_ == 1) {
    column_ = -precision.row(p_).head(p_).transpose();
    spd::solve(block_, column_);
    spd::solve_transposed(block_, column_);
  }
  spd::inverse_from_cholesky(block_);
  block_ /= total;
  check_ = block_;
  if (!spd::cholesky(check_)) return false;
  for (Index j = 0; j < p_; ++j) {
    if (!(check_(j, j) > 1e-7 * check_.row(j).head(j + 1).norm())) return false;
    for (Index i = j; i < p_; ++i) block_(i, j) *= unit(i) * unit(j);
    // Next to the ends of the number range a factorisation loses its digits.
    if (!(block_(j, j) > 1e-290 && block_(j, j) < 1e300)) return false;
  }
  spd::mirror_lower(block_);
  column_.col(0) = column_.col(0).cwiseProduct(unit) + offset;
  if (!block_.allFinite() || !column_.allFinite()) return false;
  s = block_;
  m = column_.col(0);
  return true;
}

}  // namespace tailweir

// How a tracker starts, builds its matrices from the ring, and stops when it cannot.
#include <algorithm>
#include <cmath>

#include "core/scatter/tracker.h"
#include "core/scatter/tracker_internal.h"
#include "core/spd/blas.h"

namespace tailweir {

using namespace tracker_internal;

void Tracker::start_if_ready() {
  const double d = static_cast<double>(dimension_);
  const double n = mass_square_ > 0 ? mass_ * mass_ / mass_square_ : 0;
  const bool bounded = settings_.memory.kind == Memory::Kind::window_samples ||
                       settings_.memory.kind == Memory::Kind::half_life_samples;
  const double most = bounded ? .9 * steady_samples() : 3 * d;
  if (n < std::max(std::min(3 * d, most), d + 1) - 1e-9) {
    state_ = TrackerState::filling;
    return;
  }
  if (--retry_in_ > 0) return;
  retry_in_ = std::max<std::int64_t>(1, ring_.size() / 16);
  health_.samples_effective = n;
  choose_units();
  const double nu = nu_ - static_cast<double>(lift_);
  for (std::int64_t k = ring_.begin(); k < ring_.end(); ++k) {
    const Eigen::Map<const Eigen::VectorXd> x(ring_.x(k), dimension_);
    ring_.weight(k, current_) = (d + nu) / (nu + x.squaredNorm());
    PartialSample& partial = ring_.partial(k);
    if (partial.missing.empty()) continue;
    // Before anything is known: the centre of the channel, with the spread its unit stands for.
    const Index m = static_cast<Index>(partial.missing.size());
    for (const Index j : partial.missing) ring_.x(k)[j] = 0;
    partial.factor = Eigen::MatrixXd::Identity(m, m) * std::sqrt(2.);
    partial.f = ring_.omega(k);
  }
  tail_total_ = tail_mass_ = tail_square_ = 0;
  if (tail_.size() > 0) tail_.setZero();
  recount();
  state_ = TrackerState::tracking;
  if (!build()) return;
  ++health_.rebuilds;
  for (int k = 0; k < kExactIterations; ++k) {
    if (!iterate()) return;
    if (health_.residual_at_polish * .3 <= std::min(tolerance(), .01 * statistical_error())) return;
  }
  if (health_.residual_at_polish > statistical_error()) fail(TrackerState::not_converged);
}

// Power-of-two units and an offset from the medians of the ring, and the ring rewritten in them.
void Tracker::choose_units() {
  const Index n = ring_.size();
  if (static_cast<Index>(scratch_values_.size()) < n)
    scratch_values_.resize(2 * static_cast<std::size_t>(n));
  const auto first = scratch_values_.begin();
  for (Index j = 0; j < p_; ++j) {
    const double old_unit = unit_(j);
    const double old_offset = offset_(j);
    double size = 0;
    Index seen = 0;
    for (Index k = 0; k < n; ++k) {
      const std::vector<Index>& missing = ring_.partial(ring_.begin() + k).missing;
      if (std::find(missing.begin(), missing.end(), j) != missing.end()) continue;
      first[seen++] = ring_.x(ring_.begin() + k)[j] * old_unit + old_offset;
    }
    if (seen == 0) continue;  // never observed: stays as it is
    const auto middle = first + seen / 2;
    const auto last = first + seen;
    if (lift_ == 1) {
      std::nth_element(first, middle, last);
      offset_(j) = *middle;
    }
    double sum = 0;
    for (auto value = first; value != last; ++value) {
      *value = std::abs(*value - offset_(j));
      sum += *value / static_cast<double>(seen);
    }
    std::nth_element(first, middle, last);
    size = *middle > 0 ? *middle : sum;
    unit_(j) = size > 0 && std::isfinite(size)
                   ? std::exp2(std::clamp(std::floor(std::log2(size)), -480., 500.))
                   : 1;
    for (Index k = 0; k < n; ++k) {
      double& value = ring_.x(ring_.begin() + k)[j];
      value = (value * old_unit + (old_offset - offset_(j))) / unit_(j);
    }
  }
  for (std::int64_t k = ring_.begin(); k < ring_.end(); ++k) {  // see kAbsurd
    Eigen::Map<Eigen::VectorXd> x(ring_.x(k), p_);
    const double largest = x.cwiseAbs().maxCoeff();
    if (largest > kAbsurd) x *= kAbsurd / largest;
  }
}

// A, P, W and ln det A from the ring's weights and E. On failure the tracker says why and stops.
bool Tracker::build() {
  polish_.abandon();
  rebuild_wanted_ = false;
  recount();
  const double normal = total_ > 0 && mass_ > 0 && tail_mass_ > 0 ? total_ / mass_ : 1;
  scratch_.setZero();
  if (tail_.size() > 0 && tail_mass_ > 0) scratch_ = normal * tail_;
  total_ = normal * tail_total_;
  Index count = 0;
  for (std::int64_t k = ring_.begin(); k < ring_.end(); ++k) {
    const double a = ring_.omega(k) * ring_.weight(k, current_);
    total_ += a;
    if (ring_.partial(k).f > 0) add_conditional(ring_.partial(k), 1, scratch_);
    columns_.col(count++) =
        std::sqrt(a) * Eigen::Map<const Eigen::VectorXd>(ring_.x(k), dimension_);
    if (count == columns_.cols() || k + 1 == ring_.end()) {
      spd::add_gram(1, columns_.leftCols(count), 1, scratch_);
      count = 0;
    }
  }
  if (!(total_ > 0) || !std::isfinite(total_) || !spd::cholesky(scratch_)) {
    fail(TrackerState::not_positive_definite);
    return false;
  }
  double least = 1;
  for (Index j = 0; j < dimension_; ++j) {
    least = std::min(least, scratch_(j, j) / scratch_.row(j).head(j + 1).norm());
  }
  if (!(least > 1e-7)) {  // spans fewer than p dimensions, but for rounding
    fail(TrackerState::not_positive_definite);
    return false;
  }
  log_det_ = 2 * scratch_.diagonal().array().log().sum();
  spd::inverse_from_cholesky(scratch_);
  precision_.assign(scratch_);
  health_.since_polish = 0;
  return true;
}

void Tracker::rebuild() {
  ++health_.rebuilds;
  if (!build()) return;
  for (int k = 0; k < (exact() ? kExactIterations : kIterations); ++k) {
    if (!iterate()) return;
    if (after_ <= tolerance()) return;
  }
}

void Tracker::fail(TrackerState state) {
  state_ = state;
  polish_.abandon();
  rebuild_wanted_ = false;
  health_.iterations = 0;
  view_size_ = 0;
  retry_in_ = std::max<std::int64_t>(1, ring_.size() / 16);
}

}  // namespace tailweir

// The tracker's way with missing entries: imputation, exact removal, whole iterations.
//
// A sample with missing entries enters as its regression x^ on what was observed, with a weight for
// its |o| observed channels, plus its conditional scatter f C C' (missing_sample.h); it leaves with
// exactly that. A whole iteration imputes all of them again (Liu & Rubin, Statistica Sinica 5,
// 1995).
#include <algorithm>
#include <cmath>

#include "core/scatter/tracker.h"
#include "core/scatter/weight.h"
#include "core/spd/blas.h"

namespace tailweir {

Index Tracker::observed(std::int64_t position) const {
  return p_ - static_cast<Index>(ring_.partial(position).missing.size());
}

double Tracker::coverage() const {
  if (partials_ == 0 || ring_.size() == 0) return 1;
  double missing = 0;
  for (const Index count : missing_counts_) missing += static_cast<double>(count);
  return 1 - missing / static_cast<double>(ring_.size() * p_);
}

double Tracker::coverage(Index channel) const {
  if (ring_.size() == 0) return 1;
  return 1 - static_cast<double>(missing_counts_[static_cast<std::size_t>(channel)]) /
                 static_cast<double>(ring_.size());
}

void Tracker::drop_oldest() {
  const PartialSample& partial = ring_.partial(ring_.begin());
  if (!partial.missing.empty()) {
    --partials_;
    for (const Index j : partial.missing) --missing_counts_[static_cast<std::size_t>(j)];
  }
  ring_.drop_oldest();
}

// y_ = P x^ and x_ = x^ for the new sample, its missing entries imputed; returns x^'P x^.
double Tracker::multiply_new() {
  for (const Index j : missing_now_) x_[static_cast<std::size_t>(j)] = 0;
  precision_.multiply(x_.data(), y_.data());
  if (missing_now_.empty()) return dot(x_, y_.data());
  for (const Index j : missing_now_) x_[static_cast<std::size_t>(j)] = std::nan("");
  const double q = missing_.impute_multiplied(precision_.view(), x_.data(), y_.data());
  if (std::isnan(q)) {
    for (const Index j : missing_now_) x_[static_cast<std::size_t>(j)] = 0;
    rebuild_wanted_ = true;
  }
  return q;
}

// The oldest sample leaves, with its conditional part.
void Tracker::remove_one() {
  const std::int64_t oldest = ring_.begin();
  const PartialSample& partial = ring_.partial(oldest);
  if (!partial.missing.empty() && partial.f > 0) {
    precision_.settle();
    if (missing_.remove(precision_.view(), partial.missing, partial.factor, partial.f)) {
      const Eigen::Ref<const Eigen::MatrixXd> columns = missing_.removal();
      for (Index k = 0; k < columns.cols(); ++k) {
        std::copy(columns.col(k).data(), columns.col(k).data() + dimension_,
                  padded_column_.begin());
        precision_.add(1, padded_column_.data());
      }
    } else {
      rebuild_wanted_ = true;
    }
  }
  const double a = ring_.omega(oldest) * ring_.weight(oldest, current_);
  std::copy(ring_.x(oldest), ring_.x(oldest) + x_old_.size(), x_old_.begin());
  precision_.multiply(x_old_.data(), y_old_.data());
  const double q = dot(x_old_, y_old_.data());
  const double h = a * q;
  const double nu = nu_ - static_cast<double>(lift_);
  const double p = static_cast<double>(observed(oldest) + lift_);
  gauge_.observe(std::log((p + nu) / (nu + std::max(q * total_, 0.)) * total_ /
                          (mass_ * ring_.weight(oldest, current_))));
  mass_ -= ring_.omega(oldest);
  mass_square_ -= ring_.omega(oldest) * ring_.omega(oldest);
  drop_oldest();
  if (!(h < .9)) {
    rebuild_wanted_ = true;
    return;
  }
  precision_.add(a / (1 - h), y_old_.data());
  total_ -= a;
}

void Tracker::enter_slowly() {
  const double q = multiply_new();
  const double scale = total_ / mass_;
  take_slot();
  const std::int64_t position = ring_.end() - 1;
  const double omega = ring_.omega(position);
  const double mass = mass_ + omega;
  const double nu = nu_ - static_cast<double>(lift_);
  const double p = static_cast<double>(observed(position) + lift_);
  const double d1 = std::max(q, 0.) * scale * mass;
  const double u = leave_one_out_weight(d1, omega * d1 / mass, nu, p);
  const double w = u * scale;
  mass_ = mass;
  mass_square_ += omega * omega;
  if (!std::isfinite(q) || !std::isfinite(w) || !(w > 0)) {
    ring_.weight(position, current_) = 1e-300;
    rebuild_wanted_ = true;
    return;
  }
  ring_.weight(position, current_) = w;
  ring_.distance(position) = std::max((p + nu) / u - nu - static_cast<double>(lift_), 0.);
  const double a = omega * w;
  precision_.add(-a / (1 + a * q), y_.data());
  total_ += a;
  if (missing_now_.empty()) return;
  PartialSample& partial = ring_.partial(position);
  partial.factor = missing_.conditional_factor();
  partial.f = omega / mass;
  const Eigen::Ref<const Eigen::MatrixXd> columns = missing_.update();
  for (Index k = 0; k < columns.cols(); ++k) {
    std::copy(columns.col(k).data(), columns.col(k).data() + dimension_, padded_column_.begin());
    precision_.add(-partial.f / (1 + partial.f), padded_column_.data());
  }
}

// ln det A afresh: the conditional parts change it in a way that costs as much to follow.
void Tracker::refresh_log_det() {
  precision_.settle();
  precision_.copy_to(scratch_);
  if (!spd::cholesky(scratch_)) {
    rebuild_wanted_ = true;
    return;
  }
  log_det_ = -2 * scratch_.diagonal().array().log().sum();
}

// One whole iteration in the coordinates of the samples, all at once: imputes, weighs, sums.
bool Tracker::iterate_whole() {
  polish_.abandon();
  precision_.settle();
  const double nu = nu_ - static_cast<double>(lift_);
  Eigen::MatrixXd factor(dimension_, dimension_), next(dimension_, dimension_);
  precision_.copy_to(factor);
  if (!spd::cholesky(factor)) {
    fail(TrackerState::not_positive_definite);
    return false;
  }
  next.setZero();
  if (tail_.size() > 0) next.triangularView<Eigen::Lower>() = tail_.triangularView<Eigen::Lower>();
  double total = tail_total_;
  double share = 0;  // of the mass, missing
  std::vector<double> x(static_cast<std::size_t>(precision_.padded())), y = x;
  Index count = 0;
  for (std::int64_t k = ring_.begin(); k < ring_.end(); ++k) {
    PartialSample& partial = ring_.partial(k);
    const double omega = ring_.omega(k);
    const Eigen::Map<Eigen::VectorXd> sample(ring_.x(k), dimension_);
    double q = 0;
    if (partial.missing.empty()) {
      Eigen::MatrixXd column = sample;
      spd::multiply_transposed(factor, column);
      q = column.squaredNorm();
    } else {
      std::copy(ring_.x(k), ring_.x(k) + ring_.rows(), x.begin());
      for (const Index j : partial.missing) x[static_cast<std::size_t>(j)] = std::nan("");
      q = missing_.impute(precision_.view(), x.data(), y.data());
      if (std::isnan(q)) {
        fail(TrackerState::not_positive_definite);
        return false;
      }
      std::copy(x.begin(), x.begin() + ring_.rows(), ring_.x(k));
      partial.factor = missing_.conditional_factor();
      partial.f = omega / total_;  // C C' is P_mm^-1, the conditional scatter W times that
      share += omega * static_cast<double>(partial.missing.size());
    }
    const double p = static_cast<double>(observed(k) + lift_);
    const double h = std::min(omega * ring_.weight(k, current_) * q, .999999);
    const double d1 = total_ * q / (1 - h);
    const double u = leave_one_out_weight(d1, omega * d1 / mass_, nu, p);
    ring_.weight(k, 1 - current_) = u;
    total += omega * u;
    columns_.col(count++) = std::sqrt(omega * u) * sample;
    if (count == columns_.cols() || k + 1 == ring_.end()) {
      spd::add_gram(1, columns_.leftCols(count), 1, next);
      count = 0;
    }
    const Index m = static_cast<Index>(partial.missing.size());
    for (Index b = 0; b < m; ++b) {
      for (Index c = b; c < m; ++c) {
        next(partial.missing[static_cast<std::size_t>(c)],
             partial.missing[static_cast<std::size_t>(b)]) +=
            partial.f * partial.factor.row(c).dot(partial.factor.row(b));
      }
    }
  }
  // D = L' A L W/M: what this state's S becomes, seen from it.
  Eigen::MatrixXd moved = next;
  spd::mirror_lower(moved);
  spd::multiply_transposed(factor, moved);
  Eigen::MatrixXd d = moved.transpose();
  spd::multiply_transposed(factor, d);
  d *= total_ / mass_;
  const double channels = static_cast<double>(p_);
  const double t = d.diagonal().head(p_).sum() / channels - 1;
  Eigen::MatrixXd deviation = d.topLeftCorner(p_, p_);
  deviation.diagonal().array() -= 1 + t;
  // Missing entries repeat the state's own opinion: what is seen is that share short.
  const double seen = 1 / std::max(1 - share / (mass_ * channels), .05);
  const double residual = seen * std::hypot(shape_gain(nu_, channels) * deviation.norm(),
                                            scale_gain(nu_, channels) * t * std::sqrt(channels));
  const double centre =
      lift_ == 0 ? 0 : seen * shape_gain(nu_, channels) * d.row(p_).head(p_).norm();
  const double condition =
      1 / std::pow(factor.diagonal().minCoeff() / factor.diagonal().maxCoeff(), 2);
  if (!std::isfinite(residual) || !spd::cholesky(next)) {
    fail(TrackerState::not_positive_definite);
    return false;
  }
  log_det_ = 2 * next.diagonal().array().log().sum();
  spd::inverse_from_cholesky(next);
  precision_.assign(next);
  current_ = 1 - current_;
  total_ = total;
  const double before = health_.iterations > 0 ? health_.residual_at_polish : 0;
  if (exact() && before > 1e-11) {
    contraction_ += .2 * (std::clamp(std::max(residual, centre) / before, .02, .9) - contraction_);
  }
  adopt({residual, centre, condition, ring_.begin(), ring_.end(), nu_});
  return tracking();
}

}  // namespace tailweir

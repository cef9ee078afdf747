#include "core/scatter/fixed_point.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <limits>
#include <vector>

#include "core/scatter/weight.h"
#include "core/spd/blas.h"

namespace tailweir {
namespace {

// Median of the absolute values or of the values of a row; robust starts only, so ties do not
// matter.
double median_of(std::vector<double>& values) {
  const auto middle = values.begin() + static_cast<std::ptrdiff_t>(values.size() / 2);
  std::nth_element(values.begin(), middle, values.end());
  return *middle;
}

// Work of one cold fit. With an estimated centre the constant is the first component of the
// augmented sample, so that the whitened sample is (1; L^-1 (x - m)).
class ColdFit {
 public:
  ColdFit(const Eigen::Ref<const Eigen::MatrixXd>& samples,
          const Eigen::Ref<const Eigen::ArrayXd>& mass, const FixedPointSettings& settings)
      : settings_(settings),
        lift_(settings.centre == CentreKind::estimated ? 1 : 0),
        p_(samples.rows()),
        n_(samples.cols()),
        mass_(mass / mass.sum()),
        offset_(Eigen::VectorXd::Zero(p_)),
        unit_(Eigen::VectorXd::Ones(p_)) {
    choose_offset_and_unit(samples);
    x_.resize(p_ + lift_, n_);
    if (lift_ == 1) x_.row(0).setOnes();
    x_.bottomRows(p_) = (samples.colwise() - offset_).array().colwise() / unit_.array();
  }

  FixedPoint run(const Eigen::MatrixXd& start) {
    FixedPoint fit;
    if (!x_.allFinite() || !mass_.allFinite()) {
      fit.reason = StopReason::not_finite;
      return fit;
    }
    start_weights(start);
    fit.reason = StopReason::iteration_limit;
    // Below this the residual is rounding noise of the factorisation.
    const double noise = 16 * std::numeric_limits<double>::epsilon() * static_cast<double>(p_);
    const double tolerance = std::max(settings_.tolerance, noise);
    for (fit.iterations = 1; fit.iterations <= settings_.max_iterations; ++fit.iterations) {
      if (!whiten()) {
        fit.reason = StopReason::not_positive_definite;
        return fit;
      }
      leave_one_out_weights();
      fit.residual = residual();
      if (!std::isfinite(fit.residual)) {
        fit.reason = StopReason::not_finite;
        return fit;
      }
      if (fit.residual <= tolerance && centre_residual_ <= tolerance) {
        fit.reason = StopReason::converged;
        break;
      }
      weight_ = new_weight_;
    }
    fit.iterations = std::min(fit.iterations, settings_.max_iterations);
    finish(fit);
    return fit;
  }

 private:
  void choose_offset_and_unit(const Eigen::Ref<const Eigen::MatrixXd>& samples) {
    if (settings_.centre == CentreKind::given) offset_ = settings_.given_centre;
    std::vector<double> row(static_cast<std::size_t>(n_));
    for (Index j = 0; j < p_; ++j) {
      if (lift_ == 1) {
        for (Index i = 0; i < n_; ++i) row[static_cast<std::size_t>(i)] = samples(j, i);
        offset_(j) = median_of(row);
      }
      for (Index i = 0; i < n_; ++i) {
        row[static_cast<std::size_t>(i)] = std::abs(samples(j, i) - offset_(j));
      }
      const double size = median_of(row);
      // A power of two: dividing by it loses no digit.
      if (size > 0 && std::isfinite(size)) unit_(j) = std::exp2(std::floor(std::log2(size)));
    }
  }

  void start_weights(const Eigen::MatrixXd& start) {
    const double p = static_cast<double>(p_);
    if (start.size() > 0) {
      Eigen::MatrixXd l =
          unit_.cwiseInverse().asDiagonal() * start * unit_.cwiseInverse().asDiagonal();
      if (spd::cholesky(l)) {
        Eigen::MatrixXd y = x_.bottomRows(p_);
        spd::solve(l, y);
        weight_ =
            (p + settings_.nu) / (settings_.nu + y.colwise().squaredNorm().array().transpose());
        return;
      }
    }
    // Scale-free: channels in units of their median size, distances as if they were independent.
    const Eigen::ArrayXd d = x_.bottomRows(p_).colwise().squaredNorm().array().transpose();
    weight_ = (p + settings_.nu) / (settings_.nu + d);
  }

  bool whiten() {
    total_ = (mass_ * weight_).sum();
    y_ = x_.array().rowwise() * (mass_ * weight_ / total_).sqrt().transpose();
    factor_.setZero(x_.rows(), x_.rows());
    spd::add_gram(1, y_, 0, factor_);
    if (!spd::cholesky(factor_)) return false;
    y_ = x_;
    spd::solve(factor_, y_);
    distance_ = y_.colwise().squaredNorm().array().transpose();
    // A window that spans fewer dimensions than p only seems positive definite through rounding.
    const Eigen::ArrayXd pivots = factor_.diagonal().array();
    Eigen::ArrayXd norms(x_.rows());
    for (Index j = 0; j < x_.rows(); ++j) norms(j) = factor_.row(j).head(j + 1).norm();
    return (pivots / norms).minCoeff() > 1e-7;
  }

  void leave_one_out_weights() {
    const double p = static_cast<double>(p_ + lift_);
    const double nu = settings_.nu - static_cast<double>(lift_);
    new_weight_.resize(n_);
    for (Index i = 0; i < n_; ++i) {
      const double leverage = mass_(i) * weight_(i) * distance_(i) / total_;
      const double d1 = distance_(i) / std::max(1 - leverage, 1e-15);
      new_weight_(i) = leave_one_out_weight(d1, mass_(i) * d1, nu, p);
    }
  }

  double residual() {
    const double p = static_cast<double>(p_);
    scaled_ = y_.array().rowwise() * (mass_ * new_weight_).sqrt().transpose();
    next_.setZero(x_.rows(), x_.rows());
    spd::add_gram(1, scaled_, 0, next_);
    centre_residual_ = 0;
    Eigen::MatrixXd s = next_.bottomRightCorner(p_, p_);
    if (lift_ == 1) {
      const Eigen::VectorXd m = next_.col(0).tail(p_);
      centre_residual_ = shape_gain(settings_.nu, p) * m.norm();
      s.triangularView<Eigen::Lower>() -= m * m.transpose();
    }
    const double t = s.trace() / p - 1;
    double deviation = 0;
    for (Index j = 0; j < p_; ++j) {
      deviation += std::pow(s(j, j) - 1 - t, 2);
      deviation += 2 * s.col(j).tail(p_ - 1 - j).squaredNorm();
    }
    return std::sqrt(std::pow(shape_gain(settings_.nu, p), 2) * deviation +
                     std::pow(scale_gain(settings_.nu, p) * t, 2) * p);
  }

  void finish(FixedPoint& fit) const {
    const double p = static_cast<double>(p_);
    const Eigen::MatrixXd lower = factor_.triangularView<Eigen::Lower>();
    const Eigen::MatrixXd whole = lower * lower.transpose();
    Eigen::MatrixXd s = whole.bottomRightCorner(p_, p_);
    fit.centre = offset_;
    fit.distance = distance_;
    if (lift_ == 1) {
      const Eigen::VectorXd m = whole.col(0).tail(p_);
      s -= m * m.transpose();
      fit.centre += unit_.cwiseProduct(m);
      fit.distance -= 1;
    }
    fit.scatter = unit_.asDiagonal() * s * unit_.asDiagonal();
    fit.weight = (p + settings_.nu) / (settings_.nu + fit.distance);
    fit.log_det = 2 * (factor_.diagonal().tail(p_).array().log().sum() + unit_.array().log().sum());
  }

  const FixedPointSettings& settings_;
  Index lift_, p_, n_;
  Eigen::ArrayXd mass_, weight_, new_weight_, distance_;
  Eigen::VectorXd offset_, unit_;
  Eigen::MatrixXd x_, y_, scaled_, factor_, next_;
  double total_ = 1, centre_residual_ = 0;
};

}  // namespace

FixedPoint fit_scatter(const Eigen::Ref<const Eigen::MatrixXd>& samples,
                       const Eigen::Ref<const Eigen::ArrayXd>& mass,
                       const FixedPointSettings& settings, const Eigen::MatrixXd& start) {
  assert(samples.cols() == mass.size());
  assert(settings.nu > (settings.centre == CentreKind::estimated ? 1 : 0));
  FixedPoint fit;
  if (samples.cols() < samples.rows() + (settings.centre == CentreKind::estimated ? 1 : 0)) {
    fit.reason = StopReason::not_positive_definite;
    return fit;
  }
  if (!samples.allFinite()) {
    fit.reason = StopReason::not_finite;
    return fit;
  }
  return ColdFit(samples, mass, settings).run(start);
}

}  // namespace tailweir

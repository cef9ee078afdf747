#include "core/scatter/missing.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <limits>
#include <numbers>
#include <vector>

#include "core/scatter/anderson.h"
#include "core/scatter/missing_data.h"
#include "core/scatter/missing_residual.h"
#include "core/scatter/missing_sample.h"
#include "core/scatter/weight.h"
#include "core/spd/blas.h"
#include "core/student/student.h"

namespace tailweir {
namespace {

// One fit. The state is the (lifted) scatter and the weights it was built with, in units of their
// mass-weighted sum; the leave-one-out weight needs them. A step maps state to state. Steps are
// mixed (Anderson), with residuals whitened by the state's own factor, so that a change of unit
// changes nothing. An iterate that does not factorise, or lowers the likelihood, is taken back and
// replaced by the parameter-expanded EM step, which cannot.
class Fit {
 public:
  Fit(const MissingData& data, const MissingSettings& settings)
      : data_(data),
        settings_(settings),
        p_(data.channels),
        lift_(data.lift),
        dimension_(data.channels + data.lift),
        n_(data.x.cols()),
        x_(data.x) {}

  void run(const MissingStart& start, MissingFit& fit) {
    choose_start(start);
    const double noise = 16 * std::numeric_limits<double>::epsilon() * static_cast<double>(p_);
    const double tolerance = std::max(settings_.tolerance, noise);
    for (fit.iterations = 1;; ++fit.iterations) {
      if (!expectation() || !(log_likelihood_ >= kept_log_likelihood_ - slack())) {
        if (kept_state_.size() == 0 || plain_) {
          fit.reason = factor_.allFinite() && state_.allFinite()
                           ? MissingStop::not_positive_definite
                           : MissingStop::not_finite;
          return;
        }
        take_back();
        if (fit.iterations >= settings_.max_iterations && expectation()) break;
        continue;
      }
      maximisation();
      fit.residual = rough_residual();
      if (!std::isfinite(fit.residual)) {
        fit.reason = MissingStop::not_finite;
        return;
      }
      const bool last = fit.iterations >= settings_.max_iterations;
      if (last || fit.residual <= 8 * tolerance) {
        fit.residual = missing_residual(data_, factor_, precision_, moments_, settings_.nu);
        if (fit.residual <= tolerance && centre_residual_ <= tolerance) {
          fit.reason = MissingStop::converged;
          break;
        }
      }
      if (last) break;
      step();
    }
    finish(fit);
  }

 private:
  double slack() const { return 1e-10 * (1 + std::abs(kept_log_likelihood_)); }

  void choose_start(const MissingStart& start) {
    state_.setIdentity(dimension_, dimension_);
    Eigen::VectorXd m = Eigen::VectorXd::Zero(p_);
    const Eigen::VectorXd inverse = data_.unit.cwiseInverse();
    if (start.scatter.rows() == p_ && start.scatter.allFinite()) {
      Eigen::MatrixXd s = inverse.asDiagonal() * start.scatter * inverse.asDiagonal();
      state_.bottomRightCorner(p_, p_) = s;
      if (!spd::cholesky(s)) state_.setIdentity();
    }
    if (lift_ == 1 && start.centre.size() == p_ && start.centre.allFinite()) {
      m = inverse.cwiseProduct(start.centre - data_.offset);
      state_.col(0).tail(p_) = m;
      state_.row(0).tail(p_) = m.transpose();
      state_.bottomRightCorner(p_, p_) += m * m.transpose();
    }
  }

  // Imputes, whitens, measures: x_, whitened_, distance_, conditional_, log_likelihood_.
  bool expectation() {
    factor_ = state_;
    if (!spd::cholesky(factor_)) return false;
    for (Index j = 0; j < dimension_; ++j) {
      // Entries that span fewer dimensions than p only seem positive definite through rounding.
      if (!(factor_(j, j) > 1e-7 * factor_.row(j).head(j + 1).norm())) return false;
    }
    precision_ = factor_;
    spd::inverse_from_cholesky(precision_);
    spd::mirror_lower(precision_);
    const double log_det =
        2 * (factor_.diagonal().array().log().sum() + data_.log_unit);  // row 0 of a lift is 1
    conditional_.setZero(dimension_, dimension_);
    pattern_log_det_.resize(data_.patterns.size());
    for (std::size_t g = 0; g < data_.patterns.size(); ++g) {
      if (!impute(data_.patterns[g], pattern_log_det_[g])) return false;
      double units = 0;
      for (const Index j : data_.patterns[g].missing) units += std::log(data_.unit(j - lift_));
      pattern_log_det_[g] += log_det - 2 * units;
    }
    whitened_ = x_;
    spd::solve(factor_, whitened_);
    distance_ =
        (whitened_.colwise().squaredNorm().array().transpose() - static_cast<double>(lift_)).max(0);
    log_likelihood_ = 0;
    for (std::size_t g = 0; g < data_.patterns.size(); ++g) {
      const MissingPattern& pattern = data_.patterns[g];
      const Index observed = dimension_ - lift_ - static_cast<Index>(pattern.missing.size());
      for (Index i = pattern.first; i < pattern.first + pattern.count; ++i) {
        log_likelihood_ += data_.mass(i) * student::log_density(distance_(i), observed,
                                                                settings_.nu, pattern_log_det_[g]);
      }
    }
    return true;
  }

  // Fills the pattern's missing entries and adds its conditional scatter. log_det: ln det P_mm,
  // which is ln det S_oo - ln det S.
  bool impute(const MissingPattern& pattern, double& log_det) {
    const Index m = static_cast<Index>(pattern.missing.size());
    log_det = 0;
    if (m == 0) return true;
    Eigen::MatrixXd columns(dimension_, m), block(m, m);
    for (Index k = 0; k < m; ++k) {
      const Index row = pattern.missing[static_cast<std::size_t>(k)];
      columns.col(k) = precision_.col(row);
      x_.row(row).segment(pattern.first, pattern.count).setZero();
    }
    for (Index k = 0; k < m; ++k) {
      block.row(k) = columns.row(pattern.missing[static_cast<std::size_t>(k)]);
    }
    Eigen::MatrixXd filled(m, pattern.count);
    spd::add_transposed_product(-1, columns, x_.middleCols(pattern.first, pattern.count), 0,
                                filled);
    if (!spd::cholesky(block)) return false;
    log_det = 2 * block.diagonal().array().log().sum();
    spd::solve(block, filled);
    spd::solve_transposed(block, filled);
    spd::inverse_from_cholesky(block);
    for (Index k = 0; k < m; ++k) {
      const Index row = pattern.missing[static_cast<std::size_t>(k)];
      x_.row(row).segment(pattern.first, pattern.count) = filled.row(k);
      for (Index l = k; l < m; ++l) {
        conditional_(pattern.missing[static_cast<std::size_t>(l)], row) +=
            pattern.mass * block(l, k);
      }
    }
    return true;
  }

  // New weights and whitened second moments of the completed samples.
  void maximisation() {
    weight_ = (settings_.nu + data_.observed) / (settings_.nu + distance_);
    const double lift = static_cast<double>(lift_);
    if (frozen_.size() == n_ && !plain_) {
      for (Index i = 0; i < n_; ++i) {
        const double d = distance_(i) + lift;
        const double leverage = data_.mass(i) * frozen_(i) * d;
        const double d1 = d / std::max(1 - leverage, 1e-15);
        weight_(i) = leave_one_out_weight(d1, data_.mass(i) * d1, settings_.nu - lift,
                                          data_.observed(i) + lift);
      }
    }
    moments_ = conditional_.triangularView<Eigen::Lower>();
    spd::mirror_lower(moments_);
    spd::solve(factor_, moments_);
    moments_.transposeInPlace();
    spd::solve(factor_, moments_);
    scaled_ = whitened_.array().rowwise() * (data_.mass * weight_).sqrt().transpose();
    spd::add_gram(1, scaled_, 1, moments_);
    spd::mirror_lower(moments_);
  }

  // The residual with the gains of complete samples: cheap, low by about the missing share.
  double rough_residual() {
    const double p = static_cast<double>(p_);
    Eigen::MatrixXd s = moments_.bottomRightCorner(p_, p_);
    centre_residual_ = 0;
    if (lift_ == 1) {
      const Eigen::VectorXd m = moments_.col(0).tail(p_);
      centre_residual_ = shape_gain(settings_.nu, p) * m.norm();
      s -= m * m.transpose();
    }
    const double t = s.trace() / p - 1;
    s.diagonal().array() -= 1 + t;
    return std::hypot(shape_gain(settings_.nu, p) * s.norm(),
                      scale_gain(settings_.nu, p) * t * std::sqrt(p));
  }

  void step() {
    const double total = (data_.mass * weight_).sum();
    Eigen::MatrixXd image = factor_.triangularView<Eigen::Lower>() * moments_;
    image = image * factor_.triangularView<Eigen::Lower>().transpose();
    image /= total;
    kept_state_ = state_;
    kept_frozen_ = frozen_;
    kept_log_likelihood_ = log_likelihood_;
    // One vector: lower triangle of the scatter, then the weights.
    const Index half = dimension_ * (dimension_ + 1) / 2;
    Eigen::VectorXd packed(half + n_), residual(half);
    Index k = 0;
    for (Index j = 0; j < dimension_; ++j) {
      for (Index i = j; i < dimension_; ++i, ++k) {
        packed(k) = image(i, j);
        residual(k) =
            (moments_(i, j) / total - (i == j ? 1 : 0)) * (i == j ? 1 : std::numbers::sqrt2);
      }
    }
    packed.tail(n_) = (weight_ / total).matrix();
    const bool first = frozen_.size() != n_ || plain_;
    if (first) anderson_.reset();
    const Eigen::VectorXd next = first ? packed : anderson_.mix(residual, packed);
    k = 0;
    for (Index j = 0; j < dimension_; ++j) {
      for (Index i = j; i < dimension_; ++i, ++k) state_(i, j) = state_(j, i) = next(k);
    }
    frozen_ = next.tail(n_).array().max(0);
    plain_ = false;
  }

  void take_back() {
    state_ = kept_state_;
    frozen_ = kept_frozen_;
    anderson_.reset();
    plain_ = true;
  }

  void finish(MissingFit& fit) const {
    Eigen::MatrixXd s = state_.bottomRightCorner(p_, p_);
    fit.centre = data_.offset;
    if (lift_ == 1) {
      const Eigen::VectorXd m = state_.col(0).tail(p_);
      s -= m * m.transpose();
      fit.centre += data_.unit.cwiseProduct(m);
    }
    fit.scatter = data_.unit.asDiagonal() * s * data_.unit.asDiagonal();
    fit.log_det = 2 * (factor_.diagonal().array().log().sum() + data_.log_unit);
    fit.log_likelihood = log_likelihood_;
    for (Index k = 0; k < n_; ++k) {
      const Index i = data_.order[static_cast<std::size_t>(k)];
      fit.distance(i) = distance_(k);
      fit.weight(i) = (settings_.nu + data_.observed(k)) / (settings_.nu + distance_(k));
      for (Index j = 0; j < p_; ++j) {
        if (!std::isnan(fit.imputed(j, i))) continue;
        fit.imputed(j, i) = data_.offset(j) + data_.unit(j) * x_(j + lift_, k);
      }
    }
  }

  const MissingData& data_;
  const MissingSettings& settings_;
  Index p_, lift_, dimension_, n_;
  Eigen::MatrixXd x_;                    // completed samples, lifted
  Eigen::MatrixXd state_, kept_state_;   // lifted scatter
  Eigen::ArrayXd frozen_, kept_frozen_;  // weights the state was built with, over their sum
  Eigen::MatrixXd factor_, precision_;   // of the state
  Eigen::MatrixXd conditional_;          // sum of mass times conditional scatter
  Eigen::MatrixXd whitened_, scaled_, moments_;
  std::vector<double> pattern_log_det_;  // ln det S_oo
  Eigen::ArrayXd distance_, weight_;
  Anderson anderson_;
  bool plain_ = false;
  double log_likelihood_ = 0, centre_residual_ = 0;
  double kept_log_likelihood_ = -std::numeric_limits<double>::infinity();
};

// Samples that took no part: without an entry they are the centre, without mass they are scored.
void complete_unused(const MissingData& data, double nu, MissingFit& fit) {
  const Index p = fit.imputed.rows();
  std::vector<char> used(static_cast<std::size_t>(fit.imputed.cols()), 0);
  for (const Index i : data.order) used[static_cast<std::size_t>(i)] = 1;
  Eigen::MatrixXd precision = fit.scatter;
  if (!spd::cholesky(precision)) return;
  spd::inverse_from_cholesky(precision);
  MissingSample kernel(p);
  Eigen::VectorXd x(p), direction(p);
  for (Index i = 0; i < fit.imputed.cols(); ++i) {
    if (used[static_cast<std::size_t>(i)] != 0) continue;
    if (!(fit.observed(i) > 0)) {
      fit.imputed.col(i) = fit.centre;
      continue;
    }
    x = fit.imputed.col(i) - fit.centre;
    fit.distance(i) = kernel.impute(precision, x.data(), direction.data());
    fit.weight(i) = (nu + fit.observed(i)) / (nu + fit.distance(i));
    fit.imputed.col(i) = x + fit.centre;
  }
}

}  // namespace

MissingFit fit_missing(const Eigen::Ref<const Eigen::MatrixXd>& samples,
                       const Eigen::Ref<const Eigen::ArrayXd>& mass,
                       const MissingSettings& settings, const MissingStart& start) {
  assert(settings.nu > (settings.centre == CentreKind::estimated ? 1 : 0));
  MissingFit fit;
  MissingData data;
  if (!prepare_missing(samples, mass, settings, data, fit)) return fit;
  fit.imputed = samples;
  fit.weight = Eigen::ArrayXd::Ones(samples.cols());
  fit.distance = Eigen::ArrayXd::Zero(samples.cols());
  Fit(data, settings).run(start, fit);
  if (fit.reason != MissingStop::converged && fit.reason != MissingStop::iteration_limit)
    return fit;
  complete_unused(data, settings.nu, fit);
  double used = 0;
  for (const Index i : data.order) used += mass(i);
  fit.log_likelihood *= used;
  return fit;
}

}  // namespace tailweir

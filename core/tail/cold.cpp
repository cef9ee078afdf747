// nu of a window from its samples, making every fit that the method needs.
#include <algorithm>
#include <cmath>
#include <limits>

#include "core/scatter/fixed_point.h"
#include "core/student/student.h"
#include "core/tail/tail.h"

namespace tailweir::tail {
namespace {

struct Window {
  const Eigen::Ref<const Eigen::MatrixXd>& samples;
  Eigen::ArrayXd mass;  // sum 1
  const CentreSettings& centre;
  const NuSettings& settings;

  double samples_effective() const { return 1 / mass.square().sum(); }
};

FixedPoint fit_at(const Window& window, double nu, const Eigen::MatrixXd& start) {
  FixedPointSettings how;
  how.nu = nu;
  how.centre = window.centre.kind;
  how.given_centre = window.centre.given;
  how.tolerance = 1e-11;
  return fit_scatter(window.samples, window.mass, how, start);
}

FitView view_of(const Window& window, const FixedPoint& fit, double nu) {
  return {window.mass,           fit.weight, fit.distance,
          window.samples.rows(), nu,         window.centre.kind == CentreKind::estimated};
}

NuEstimate nothing(const NuSettings& settings) {
  NuEstimate estimate;
  estimate.nu = estimate.unblended = std::sqrt(settings.floor * settings.ceiling);
  estimate.nu_low = settings.floor;
  estimate.nu_high = settings.ceiling;
  estimate.standard_error_log = std::numeric_limits<double>::infinity();
  return estimate;
}

NuEstimate cold_leave_one_out(const Window& window, bool censored) {
  Workspace workspace(window.samples.cols());
  double nu0 = 5;
  Eigen::MatrixXd start;
  NuEstimate estimate = nothing(window.settings);
  for (int pass = 0; pass < 2; ++pass) {
    const FixedPoint fit = fit_at(window, nu0, start);
    if (fit.reason != StopReason::converged) return nothing(window.settings);
    const FitView view = view_of(window, fit, nu0);
    estimate = censored ? leave_one_out_censored(view, window.settings, workspace)
                        : leave_one_out(view, window.settings, workspace);
    nu0 = std::clamp(estimate.unblended, 2., 50.);
    start = fit.scatter;
  }
  return estimate;
}

// Mean log likelihood at a fit.
double log_likelihood(const Window& window, const FixedPoint& fit, double nu) {
  double sum = 0;
  for (Index i = 0; i < fit.distance.size(); ++i) {
    sum += window.mass(i) *
           student::log_density(fit.distance(i), window.samples.rows(), nu, fit.log_det);
  }
  return sum;
}

// Iterates nu <- step(fit at nu) to its fixed point with Aitken's acceleration in ln nu.
template <typename Step>
NuEstimate iterate(const Window& window, double nu, Step step, double tolerance, FixedPoint& fit) {
  const double floor =
      std::max(window.settings.floor, window.centre.kind == CentreKind::estimated ? 1.01 : 0.);
  const double low = std::log(floor), high = std::log(window.settings.ceiling);
  NuEstimate estimate = nothing(window.settings);
  double x = std::clamp(std::log(nu), low, high);
  double before = x, before_image = x;
  Eigen::MatrixXd start;
  for (int k = 0; k < 200; ++k) {
    FixedPoint next = fit_at(window, std::exp(x), start);
    if (next.reason != StopReason::converged) return nothing(window.settings);
    fit = std::move(next);
    start = fit.scatter;
    estimate = step(fit, std::exp(x));
    const double image = std::clamp(std::log(estimate.nu), low, high);
    if (std::abs(image - x) <= tolerance) return estimate;
    double ahead = image;
    if (k > 0) {
      const double rate = (image - before_image) / (x - before);
      // Extrapolate only where the map contracts in one direction; never across the bounds.
      if (rate > 0 && rate < .99) ahead = x + (image - x) / (1 - rate);
    }
    before = x;
    before_image = image;
    x = std::clamp(ahead, low, high);
  }
  return estimate;
}

// Bound of the profile likelihood interval on one side of the maximum: refits at every trial.
double profile_bound(const Window& window, double nu, double top, double direction) {
  const double floor =
      std::max(window.settings.floor, window.centre.kind == CentreKind::estimated ? 1.01 : 0.);
  const double low = std::log(floor), high = std::log(window.settings.ceiling);
  const double drop = 1.920729410347062 / window.samples_effective();  // chi-square(1) .95, halved
  Eigen::MatrixXd start;
  const auto enough = [&](double x) {
    const FixedPoint fit = fit_at(window, std::exp(x), start);
    if (fit.reason != StopReason::converged) return true;
    start = fit.scatter;
    return log_likelihood(window, fit, std::exp(x)) < top - drop;
  };
  double inside = std::log(nu), step = .1;
  double outside = inside;
  for (;;) {
    outside = std::clamp(inside + direction * step, low, high);
    if (enough(outside)) break;
    if (outside <= low || outside >= high) return std::exp(outside);
    inside = outside;
    step *= 2;
  }
  for (int k = 0; k < 40 && std::abs(outside - inside) > 1e-7; ++k) {
    const double middle = .5 * (inside + outside);
    (enough(middle) ? outside : inside) = middle;
  }
  return std::exp(.5 * (inside + outside));
}

NuEstimate cold_likelihood(const Window& window) {
  FixedPoint fit;
  const auto step = [&](const FixedPoint& at, double nu) {
    return likelihood_step(view_of(window, at, nu), window.settings);
  };
  NuEstimate estimate = iterate(window, 5, step, 1e-9, fit);
  if (estimate.status == NuStatus::not_identified) return estimate;
  const FixedPoint last = fit_at(window, estimate.nu, fit.scatter);
  if (last.reason != StopReason::converged) return estimate;
  const double top = log_likelihood(window, last, estimate.nu);
  estimate.nu_low = profile_bound(window, estimate.nu, top, -1);
  estimate.nu_high = profile_bound(window, estimate.nu, top, 1);
  return estimate;
}

NuEstimate cold_moment(const Window& window) {
  FixedPoint fit;
  const Index p = window.samples.rows();
  if (window.settings.method == NuMethod::pop) {
    return iterate(
        window, 5,
        [&](const FixedPoint& at, double nu) {
          return pop_step(view_of(window, at, nu), window.settings);
        },
        1e-7, fit);
  }
  Eigen::VectorXd m = Eigen::VectorXd::Zero(p);
  if (window.centre.kind == CentreKind::given) m = window.centre.given;
  if (window.centre.kind == CentreKind::estimated) m = window.samples * window.mass.matrix();
  double trace = 0;
  for (Index i = 0; i < window.samples.cols(); ++i) {
    trace += window.mass(i) * (window.samples.col(i) - m).squaredNorm();
  }
  NuEstimate estimate = iterate(
      window, 5,
      [&](const FixedPoint& at, double) {
        return trace_ratio_step(trace, at.scatter.trace(), p, window.settings);
      },
      1e-7, fit);
  return estimate;
}

// Fewer samples than the scatter needs: interleaved blocks of channels, mean of 1/nu.
NuEstimate by_blocks(const Window& window, Index blocks) {
  const Index p = window.samples.rows();
  double inverse = 0, low = 0, high = 0;
  NuEstimate estimate;
  Index used = 0;
  for (Index b = 0; b < blocks; ++b) {
    const Index rows = (p - b + blocks - 1) / blocks;
    Eigen::MatrixXd part(rows, window.samples.cols());
    CentreSettings centre = window.centre;
    if (centre.kind == CentreKind::given) centre.given.resize(rows);
    for (Index j = 0; j < rows; ++j) {
      part.row(j) = window.samples.row(b + j * blocks);
      if (centre.kind == CentreKind::given) centre.given(j) = window.centre.given(b + j * blocks);
    }
    const Eigen::Ref<const Eigen::MatrixXd> view(part);
    const NuEstimate one = cold_leave_one_out({view, window.mass, centre, window.settings},
                                              window.settings.method == NuMethod::censored);
    if (!(one.effective_channels > 0)) continue;
    inverse += 1 / one.unblended;
    low += 1 / one.nu_low;
    high += 1 / one.nu_high;
    estimate = one;
    ++used;
  }
  if (used == 0) return nothing(window.settings);
  const double count = static_cast<double>(used);
  // Blocks share their samples, so the interval does not shrink with their number.
  estimate.nu = estimate.unblended =
      std::clamp(count / inverse, window.settings.floor, window.settings.ceiling);
  estimate.nu_low = std::min(count / low, estimate.nu);
  estimate.nu_high = std::max(count / high, estimate.nu);
  return estimate;
}

}  // namespace

NuEstimate estimate_nu(const Eigen::Ref<const Eigen::MatrixXd>& samples,
                       const Eigen::Ref<const Eigen::ArrayXd>& mass, const CentreSettings& centre,
                       const NuSettings& settings) {
  const Window window{samples, mass / mass.sum(), centre, settings};
  const double p = static_cast<double>(samples.rows());
  const double n = window.samples_effective();
  switch (settings.method) {
    case NuMethod::fixed: {
      NuEstimate estimate;
      estimate.nu = estimate.nu_low = estimate.nu_high = estimate.unblended = settings.fixed;
      estimate.status = NuStatus::fixed;
      return estimate;
    }
    case NuMethod::kurtosis:
      return kurtosis(samples, mass, centre, settings);
    case NuMethod::likelihood:
      return cold_likelihood(window);
    case NuMethod::pop:
    case NuMethod::trace_ratio:
      return cold_moment(window);
    case NuMethod::leave_one_out:
    case NuMethod::censored:
      break;
  }
  if (p > .75 * n) {
    const Index most = std::max<Index>(1, static_cast<Index>(n / 3));
    return by_blocks(window, (samples.rows() + most - 1) / most);
  }
  return cold_leave_one_out(window, settings.method == NuMethod::censored);
}

}  // namespace tailweir::tail

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
  // Two passes. Where the light-tail moment leads, a third at the blended nu, the fit that a stream
  // would be at: without it the mean square error at p/n >= .5 and nu = 10 is a tenth larger.
  for (int pass = 0; pass < 3; ++pass) {
    if (pass == 2) {
      if (censored || heavy_tail_share(estimate.unblended) >= .5) break;
      nu0 = std::clamp(estimate.nu, 2., 50.);
    }
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

// Bound of the 95% profile likelihood interval on one side (direction -1 or 1) of the maximum at
// nu, where the mean log likelihood is top. r, the root of twice the likelihood drop, is nearly
// linear in ln nu, so that regula falsi with the Illinois rule needs about six refits.
double profile_bound(const Window& window, const NuEstimate& at, double top, double direction,
                     const Eigen::MatrixXd& scatter) {
  constexpr double kRoot = 1.959963984540054;  // of the .95 point of chi-square(1)
  const double floor =
      std::max(window.settings.floor, window.centre.kind == CentreKind::estimated ? 1.01 : 0.);
  const double low = std::log(floor), high = std::log(window.settings.ceiling);
  const double samples = window.samples_effective();
  Eigen::MatrixXd start = scatter;
  // r - kRoot; without a fit the value counts as outside.
  const auto miss = [&](double x) {
    const FixedPoint fit = fit_at(window, std::exp(x), start);
    if (fit.reason != StopReason::converged) return kRoot;
    start = fit.scatter;
    const double drop = top - log_likelihood(window, fit, std::exp(x));
    return std::sqrt(2 * samples * std::max(drop, 0.)) - kRoot;
  };
  double inside = std::log(at.nu), inside_miss = -kRoot;
  double step = std::clamp(kRoot * at.standard_error_log, .02, 1.);
  double outside = inside, outside_miss = 0;
  for (;;) {
    outside = std::clamp(inside + direction * step, low, high);
    outside_miss = miss(outside);
    if (outside_miss >= 0) break;
    if (outside <= low || outside >= high) return std::exp(outside);
    step = std::clamp(-step * outside_miss / (outside_miss - inside_miss), .02, 2 * step) * 1.05;
    inside = outside;
    inside_miss = outside_miss;
  }
  int kept = 0;  // which end the last steps kept: the Illinois rule halves its value
  for (int k = 0; k < 40 && std::abs(outside - inside) > 1e-6; ++k) {
    const double x = (inside * outside_miss - outside * inside_miss) / (outside_miss - inside_miss);
    const double value = miss(x);
    if (std::abs(value) < 1e-7) return std::exp(x);
    (value < 0 ? inside : outside) = x;
    (value < 0 ? inside_miss : outside_miss) = value;
    const int side = value < 0 ? 1 : -1;
    if (side == kept) (value < 0 ? outside_miss : inside_miss) *= .5;
    kept = side;
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
  estimate.nu_low = profile_bound(window, estimate, top, -1, last.scatter);
  estimate.nu_high = profile_bound(window, estimate, top, 1, last.scatter);
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

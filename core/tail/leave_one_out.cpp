// The leave-one-out scaled-F posterior of nu ("LOO-F"), its light-tail blend and its censored
// variant. Derivation: core/tail/README.md.
#include <algorithm>
#include <cmath>
#include <limits>

#include "core/student/student.h"
#include "core/tail/profile.h"
#include "core/tail/tail.h"

namespace tailweir::tail {
namespace {

// Share of the mass that the censored variant does not look at.
constexpr double kCensored = .05;

// Corrected distances and what the profile needs of them. False when they tell nothing: not finite,
// or all zero.
bool prepare(const FitView& fit, const NuSettings& settings, Workspace& workspace, ScaledF& data) {
  const Index n = fit.mass.size();
  data.p = leave_one_out_distances(fit, workspace);
  if (!(data.p > 0) || !std::isfinite(data.p)) return false;
  double largest = 0;
  for (Index i = 0; i < n; ++i) {
    if (!std::isfinite(workspace.delta(i)) || workspace.delta(i) < 0) return false;
    largest = std::max(largest, workspace.delta(i));
  }
  if (!(largest > 0)) return false;
  // A sample at the centre has distance 0, whose logarithm is not finite. Ratios up to 1e150 keep
  // the products of sums_equal() finite.
  const double least = std::max(largest * 1e-150, 1e-300);
  data.log_largest = std::log(largest);
  double square = 0;
  double least_mass = std::numeric_limits<double>::infinity(), most_mass = 0;
  for (Index i = 0; i < n; ++i) {
    const double v = fit.mass(i);
    workspace.delta(i) = std::max(workspace.delta(i), least);
    square += v * v;
    least_mass = std::min(least_mass, v);
    most_mass = std::max(most_mass, v);
    data.mean_log += v * std::log(workspace.delta(i));
  }
  data.delta = workspace.delta.data();
  data.mass = fit.mass.data();
  data.n = n;
  data.equal = least_mass == most_mass;
  data.log_gamma_p = std::lgamma(data.p / 2);
  data.samples = 1 / square;
  data.rate = settings.prior_rate;
  return true;
}

NuEstimate degenerate(const NuSettings& settings, const NuEstimate* previous) {
  NuEstimate estimate;
  const double nu =
      previous != nullptr ? previous->nu : std::sqrt(settings.floor * settings.ceiling);
  estimate.nu = std::clamp(nu, settings.floor, settings.ceiling);
  estimate.unblended = estimate.nu;
  estimate.nu_low = settings.floor;
  estimate.nu_high = settings.ceiling;
  estimate.standard_error_log = std::numeric_limits<double>::infinity();
  estimate.status = NuStatus::not_identified;
  return estimate;
}

bool blend_applies(const FitView& fit, const ScaledF& data) {
  const double p = static_cast<double>(fit.channels);
  if (data.equal) return p <= .75 * static_cast<double>(data.n);
  return p * fit.mass.maxCoeff() <= .3;
}

void finish(const NuSettings& settings, double samples, NuEstimate& estimate) {
  const double information =
      student::information_nu_scale_profiled(estimate.effective_channels, estimate.unblended);
  estimate.standard_error_log = information > 0
                                    ? 1 / (estimate.unblended * std::sqrt(samples * information))
                                    : std::numeric_limits<double>::infinity();
  estimate.nu = std::clamp(estimate.nu, settings.floor, settings.ceiling);
  estimate.nu_low =
      std::clamp(std::min(estimate.nu_low, estimate.nu), settings.floor, settings.ceiling);
  estimate.nu_high =
      std::clamp(std::max(estimate.nu_high, estimate.nu), settings.floor, settings.ceiling);
  estimate.status = NuStatus::estimated;
  if (estimate.nu <= settings.floor) {
    estimate.status = NuStatus::at_floor;
  } else if (estimate.nu >= settings.ceiling) {
    estimate.status = NuStatus::at_ceiling;
  } else if (estimate.nu < 30 && !(estimate.standard_error_log <= 1)) {
    estimate.status = NuStatus::not_identified;
  }
}

// No log posterior that is not a number, and a finite largest one.
bool usable(const Eigen::ArrayXd& lp) { return !lp.isNaN().any() && std::isfinite(lp.maxCoeff()); }

// The part of the grid around the previous interval, thinned to about 25 points. False when there
// is no previous interval or the mass runs off that part.
bool fill_around(const NuEstimate* previous, const ScaledF& data, Eigen::ArrayXd& lp) {
  if (previous == nullptr || !(previous->unblended > 0) ||
      !(previous->nu_high > previous->nu_low)) {
    return false;
  }
  const double centre = std::log(previous->unblended);
  const double below = std::max(centre - std::log(previous->nu_low), .1);
  const double above = std::max(std::log(previous->nu_high) - centre, .1);
  // 95% intervals reach 2 standard errors: 2.8 and 3.2 times that is where the posterior has fallen
  // by more than 12 in the logarithm.
  const double from = (centre - 2.8 * below - grid_log_nu(0)) / grid_step();
  const double to = (centre + 3.2 * above - grid_log_nu(0)) / grid_step();
  const double end = static_cast<double>(kGridPoints - 1);
  const Index first = static_cast<Index>(std::clamp(from, 0., end - 12));
  const Index wanted = static_cast<Index>(std::clamp(to + 1, static_cast<double>(first + 12), end));
  const Index stride = std::clamp((wanted - first + 23) / 24, Index{1}, Index{4});
  const Index length = (wanted - first + stride - 1) / stride * stride;
  // The stride must land on the last point: step back into the grid when it overshoots.
  const Index start = std::min(first, kGridPoints - 1 - length);
  return start >= 0 && fill_narrow(data, start, start + length, stride, lp);
}

}  // namespace

double heavy_tail_share(double nu) { return std::clamp((1 / nu - 1. / 10) * 10, 0., 1.); }

NuEstimate leave_one_out(const FitView& fit, const NuSettings& settings, Workspace& workspace,
                         const NuEstimate* previous) {
  ScaledF data;
  if (fit.mass.size() < 2 || !prepare(fit, settings, workspace, data)) {
    return degenerate(settings, previous);
  }
  if (!fill_around(previous, data, workspace.log_posterior)) {
    fill_whole(data, workspace.log_posterior);
  }
  if (!usable(workspace.log_posterior)) return degenerate(settings, previous);
  NuEstimate estimate;
  estimate.effective_channels = data.p;
  summarise(workspace.log_posterior, estimate);
  estimate.nu = estimate.unblended;
  const double share = heavy_tail_share(estimate.unblended);
  if (share < 1 && blend_applies(fit, data)) {
    const double moment = light_tail_moment(fit, estimate.unblended);
    estimate.nu = 1 / (1 / moment + share * (1 / estimate.unblended - 1 / moment));
  }
  finish(settings, data.samples, estimate);
  return estimate;
}

namespace {

// Largest distance that stays below the censored share: nothing when ties leave none to censor.
// Walks down from the top, one distinct value a step.
void choose_limit(const FitView& fit, const Workspace& workspace, ScaledF& data) {
  double limit = std::numeric_limits<double>::infinity();
  for (;;) {
    double next = 0, mass = 0;
    for (Index i = 0; i < data.n; ++i) {
      const double delta = workspace.delta(i);
      if (delta < limit && delta > next) {
        next = delta;
        mass = 0;
      }
      if (delta == next) mass += fit.mass(i);
    }
    limit = next;
    if (!(next > 0) || data.above + mass > kCensored) break;
    data.above += mass;
  }
  data.limit = limit;
}

}  // namespace

NuEstimate leave_one_out_censored(const FitView& fit, const NuSettings& settings,
                                  Workspace& workspace) {
  ScaledF data;
  if (fit.mass.size() < 2 || !prepare(fit, settings, workspace, data)) {
    return degenerate(settings, nullptr);
  }
  choose_limit(fit, workspace, data);
  if (!(data.limit > 0) || !(data.above > 0)) return leave_one_out(fit, settings, workspace);
  // Moves the distances looked at, and their masses, to the front.
  Index kept = 0;
  data.kept = data.mean_log = 0;
  for (Index i = 0; i < data.n; ++i) {
    const double delta = workspace.delta(i);
    if (delta > data.limit) continue;
    data.kept += fit.mass(i);
    data.mean_log += fit.mass(i) * std::log(delta);
    workspace.scratch(kept) = fit.mass(i);
    workspace.delta(kept++) = delta;
  }
  data.mass = workspace.scratch.data();
  data.n = kept;
  fill_whole(data, workspace.log_posterior);
  if (!usable(workspace.log_posterior)) return degenerate(settings, nullptr);
  NuEstimate estimate;
  estimate.effective_channels = data.p;
  summarise(workspace.log_posterior, estimate);
  estimate.nu = estimate.unblended;
  finish(settings, data.samples, estimate);
  return estimate;
}

}  // namespace tailweir::tail

// nu by maximum likelihood with scatter and centre held (one ECME step).
#include <algorithm>
#include <cmath>
#include <limits>

#include "core/student/student.h"
#include "core/tail/tail.h"

namespace tailweir::tail {
namespace {

// Mean log likelihood of the distances at nu, constants in nu dropped.
double log_likelihood(const FitView& fit, double nu) {
  const double p = static_cast<double>(fit.channels);
  double sum = fit.observed == nullptr ? student::log_density(0, fit.channels, nu, 0) : 0;
  for (Index i = 0; i < fit.mass.size(); ++i) {
    const double k = fit.observed == nullptr ? p : fit.observed[i];
    double part = -(k + nu) / 2 * std::log1p(fit.distance(i) / nu);
    if (fit.observed != nullptr) part += student::log_density(0, static_cast<Index>(k), nu, 0);
    sum += fit.mass(i) * part;
  }
  return sum;
}

// Twice its derivative in nu.
double slope(const FitView& fit, double nu) {
  const double p = static_cast<double>(fit.channels);
  double sum = fit.observed == nullptr ? student::digamma_ratio(p, nu) - p / nu : 0;
  for (Index i = 0; i < fit.mass.size(); ++i) {
    const double k = fit.observed == nullptr ? p : fit.observed[i];
    const double z = fit.distance(i) / nu;
    double part = (nu + k) / nu * z / (1 + z) - std::log1p(z);
    if (fit.observed != nullptr) part += student::digamma_ratio(k, nu) - k / nu;
    sum += fit.mass(i) * part;
  }
  return sum;
}

}  // namespace

NuEstimate likelihood_step(const FitView& fit, const NuSettings& settings) {
  NuEstimate estimate;
  const double p = static_cast<double>(fit.channels);
  estimate.effective_channels = p;
  const double floor = std::max(settings.floor, fit.centre_estimated ? 1.01 : 0.);
  const double low = std::log(floor), high = std::log(std::max(settings.ceiling, floor * 1.01));
  // A coarse scan finds the highest hill, bisection on the slope its top.
  constexpr int kScan = 24;
  int best = 0;
  double top = -std::numeric_limits<double>::infinity();
  for (int k = 0; k <= kScan; ++k) {
    const double value = log_likelihood(fit, std::exp(low + (high - low) * k / kScan));
    if (value > top) {
      top = value;
      best = k;
    }
  }
  if (!std::isfinite(top)) {
    estimate.nu = estimate.unblended = fit.nu0;
    estimate.nu_low = settings.floor;
    estimate.nu_high = settings.ceiling;
    estimate.standard_error_log = std::numeric_limits<double>::infinity();
    return estimate;
  }
  double a = low + (high - low) * std::max(best - 1, 0) / kScan;
  double b = low + (high - low) * std::min(best + 1, kScan) / kScan;
  estimate.status = NuStatus::estimated;
  if (best == kScan && slope(fit, std::exp(high)) >= 0) {
    estimate.nu = settings.ceiling;
    estimate.status = NuStatus::at_ceiling;
  } else if (best == 0 && slope(fit, floor) <= 0) {
    estimate.nu = floor;
    estimate.status = NuStatus::at_floor;
  } else {
    for (int k = 0; k < 60 && b - a > 1e-14; ++k) {
      const double middle = .5 * (a + b);
      (slope(fit, std::exp(middle)) > 0 ? a : b) = middle;
    }
    estimate.nu = std::exp(.5 * (a + b));
  }
  const double samples = 1 / fit.mass.square().sum();
  const double information = student::information_nu_scale_profiled(p, estimate.nu);
  estimate.standard_error_log = information > 0
                                    ? 1 / (estimate.nu * std::sqrt(samples * information))
                                    : std::numeric_limits<double>::infinity();
  const double reach = std::min(1.96 * estimate.standard_error_log, 50.);
  estimate.nu_low = std::clamp(estimate.nu * std::exp(-reach), settings.floor, settings.ceiling);
  estimate.nu_high = std::clamp(estimate.nu * std::exp(reach), settings.floor, settings.ceiling);
  estimate.unblended = estimate.nu;
  return estimate;
}

}  // namespace tailweir::tail

// Moment estimators of nu and the finite-sample constants; formulas in core/tail/README.md.
#include <algorithm>
#include <boost/math/special_functions/beta.hpp>
#include <cmath>
#include <limits>

#include "core/student/student.h"
#include "core/tail/tail.h"

namespace tailweir::tail {
namespace {

constexpr double kLightest = 1000;

// g with sum v g/(1 + v p g) = 1; 1/(1 - p/n) for equal masses. The left side rises from 0 to
// sum 1/p = n/p, so a root exists when n > p.
double leverage_gain(const Eigen::Ref<const Eigen::ArrayXd>& mass, double p) {
  const Index n = mass.size();
  if (mass.minCoeff() == mass.maxCoeff()) {
    const double share = p / static_cast<double>(n);
    return share < 1 ? 1 / (1 - share) : std::numeric_limits<double>::infinity();
  }
  double g = 1;
  for (int k = 0; k < 200; ++k) {
    double value = 0, slope = 0;
    for (Index i = 0; i < n; ++i) {
      const double r = 1 / (1 + mass(i) * p * g);
      value += mass(i) * g * r;
      slope += mass(i) * r * r;
    }
    const double next = g + (1 - value) / slope;  // concave: Newton from below climbs to the root
    if (!std::isfinite(next) || next > 1e12) return std::numeric_limits<double>::infinity();
    if (std::abs(next - g) <= 1e-13 * g) return next;
    g = next;
  }
  return g;
}

NuEstimate from_theta(double theta, double samples, Index channels, const NuSettings& settings) {
  NuEstimate estimate;
  estimate.nu = theta > 1 ? 2 * theta / (theta - 1) : std::numeric_limits<double>::infinity();
  if (std::isnan(theta)) {
    estimate.nu = std::sqrt(settings.floor * settings.ceiling);
    estimate.nu_low = settings.floor;
    estimate.nu_high = settings.ceiling;
    estimate.standard_error_log = std::numeric_limits<double>::infinity();
    estimate.unblended = estimate.nu;
    return estimate;
  }
  estimate.status = NuStatus::estimated;
  if (estimate.nu >= settings.ceiling) {
    estimate.nu = settings.ceiling;
    estimate.status = NuStatus::at_ceiling;
  } else if (estimate.nu <= settings.floor) {
    estimate.nu = settings.floor;
    estimate.status = NuStatus::at_floor;
  }
  // No law of its own: the interval is the information bound's, as if the estimate were efficient.
  const double p = static_cast<double>(channels);
  const double information = student::information_nu_scale_profiled(p, estimate.nu);
  estimate.standard_error_log = information > 0
                                    ? 1 / (estimate.nu * std::sqrt(samples * information))
                                    : std::numeric_limits<double>::infinity();
  const double reach = std::min(1.96 * estimate.standard_error_log, 50.);
  estimate.nu_low = std::clamp(estimate.nu * std::exp(-reach), settings.floor, settings.ceiling);
  estimate.nu_high = std::clamp(estimate.nu * std::exp(reach), settings.floor, settings.ceiling);
  estimate.effective_channels = p;
  estimate.unblended = estimate.nu;
  return estimate;
}

}  // namespace

double light_tail_moment(const FitView& fit, double nu_start) {
  const Index n = fit.mass.size();
  const double p = static_cast<double>(fit.channels);
  const double gain = leverage_gain(fit.mass, p);
  double nu = nu_start;
  double s = 1;
  for (int round = 0; round < 200; ++round) {
    // s: the scale at which the distances have the mean weight of this nu.
    const double target = p / (p + nu);
    for (int k = 0; k < 100; ++k) {
      double share = 0, slope = 0;
      for (Index i = 0; i < n; ++i) {
        const double r = fit.distance(i) / (nu * s + fit.distance(i));
        share += fit.mass(i) * r;
        slope += fit.mass(i) * r * (1 - r);
      }
      if (!(slope > 0)) return kLightest;
      const double step = std::clamp((share - target) / slope, -2., 2.);
      s *= std::exp(step);
      if (std::abs(step) < 1e-10) break;
    }
    double sum_omega = 0;
    if (fit.centre_estimated) {
      for (Index i = 0; i < n; ++i) {
        sum_omega += fit.mass(i) * (p + nu) / (nu + fit.distance(i) / s);
      }
    }
    double theta = 0;
    for (Index i = 0; i < n; ++i) {
      const double d = fit.distance(i) / s;
      const double omega = fit.mass(i) * (p + nu) / (nu + d);
      const double left = 1 - omega * d - (fit.centre_estimated ? omega / sum_omega : 0);
      theta += fit.mass(i) * d / std::max(left, 1e-9);
    }
    theta /= p * gain;
    const double next =
        theta > 1 ? std::clamp(2 * theta / (theta - 1), 2.01, kLightest) : kLightest;
    if (!std::isfinite(next) || !std::isfinite(s)) return nu_start;  // absurd distances say nothing
    const bool settled = std::abs(next - nu) <= 1e-6 * nu;
    nu = next;
    if (settled) break;
  }
  return nu;
}

NuEstimate pop_step(const FitView& fit, const NuSettings& settings) {
  const Index n = fit.mass.size();
  const double p = static_cast<double>(fit.channels);
  const double sum_omega = (fit.mass * fit.weight).sum();
  double mean = 0;
  for (Index i = 0; i < n; ++i) {
    const double v = fit.mass(i);
    const double omega = v * fit.weight(i);
    const double left =
        1 - omega * fit.distance(i) - (fit.centre_estimated ? omega / sum_omega : 0);
    // The scatter of the others keeps its normalisation: a factor 1 - v, which dividing by the
    // others' mass would bring, doubles the mean square error at nu = 6 and n = 40.
    mean += v * fit.distance(i) / std::max(left, 1e-9);
  }
  const double samples = 1 / fit.mass.square().sum();
  return from_theta(mean / p / leverage_gain(fit.mass, p), samples, fit.channels, settings);
}

NuEstimate trace_ratio_step(double covariance_trace, double scatter_trace, Index channels,
                            const NuSettings& settings) {
  return from_theta(covariance_trace / scatter_trace, 1, channels, settings);
}

NuEstimate kurtosis(const Eigen::Ref<const Eigen::MatrixXd>& samples,
                    const Eigen::Ref<const Eigen::ArrayXd>& mass, const CentreSettings& centre,
                    const NuSettings& settings) {
  const Index p = samples.rows();
  const Index n = samples.cols();
  const double total = mass.sum();
  double mean_excess = 0;
  for (Index j = 0; j < p; ++j) {
    double m = 0;
    if (centre.kind == CentreKind::given) m = centre.given(j);
    if (centre.kind == CentreKind::estimated) {
      for (Index i = 0; i < n; ++i) m += mass(i) / total * samples(j, i);
    }
    double second = 0, fourth = 0;
    for (Index i = 0; i < n; ++i) {
      const double square = (samples(j, i) - m) * (samples(j, i) - m);
      second += mass(i) / total * square;
      fourth += mass(i) / total * square * square;
    }
    mean_excess += (fourth / (second * second) - 3) / static_cast<double>(p);
  }
  const double kappa = mean_excess / 3;
  const double nu = kappa > 0 ? 2 / kappa + 4 : std::numeric_limits<double>::infinity();
  const double square = (mass / total).square().sum();
  // theta = nu/(nu - 2) turns into the same nu again.
  const double theta = std::isnan(kappa) ? kappa : (std::isinf(nu) ? 1 : nu / (nu - 2));
  return from_theta(theta, 1 / square, p, settings);
}

namespace {

// Mean of f over d0 ~ p F(p, nu): trapezoid rule in ln d0, which converges geometrically.
template <typename Function>
double mean_over_distance(double p, double nu, Function f) {
  double sum = 0, weight = 0;
  const double low = -60 / std::min(p, 20.), high = std::log(p) + 60 / std::min(nu, 20.);
  constexpr int kNodes = 1500;
  for (int k = 0; k <= kNodes; ++k) {
    const double y = low + (high - low) * k / kNodes;
    const double density = std::exp(student::log_density_of_log_distance(y, p, nu));
    weight += density;
    sum += density * f(std::exp(y));
  }
  return sum / weight;
}

// d of a sample at the fixed point, from its distance delta to the others' scatter.
double own_distance(double delta, double p, double nu, double n) {
  const double b = nu + (p + nu) * delta / n - delta;
  const double root = std::sqrt(b * b + 4 * delta * nu);
  return b < 0 ? .5 * (root - b) : 2 * delta * nu / (b + root);
}

}  // namespace

double finite_sample_gamma(double channels, double nu, double n) {
  const double p = channels;
  double low = 0, high = std::log(4.);
  const auto miss = [&](double log_gamma) {
    return mean_over_distance(p, nu,
                              [&](double d0) {
                                const double d = own_distance(std::exp(log_gamma) * d0, p, nu, n);
                                return (p + nu) / (nu + d) * d;
                              }) -
           p;
  };
  while (miss(high) < 0 && high < 20) high *= 2;
  for (int k = 0; k < 45; ++k) {
    const double middle = .5 * (low + high);
    (miss(middle) < 0 ? low : high) = middle;
  }
  return std::exp(.5 * (low + high));
}

double finite_sample_scale(double channels, double nu, double n) {
  const double p = channels;
  const double gamma = finite_sample_gamma(p, nu, n);
  return mean_over_distance(p, nu,
                            [&](double d0) {
                              const double d = own_distance(gamma * d0, p, nu, n);
                              return (p + nu) / (nu + d) * d0;
                            }) /
         p;
}

}  // namespace tailweir::tail

// The leave-one-out scaled-F posterior of nu on its grid; formulas in core/tail/README.md.
#include <algorithm>
#include <boost/math/special_functions/beta.hpp>
#include <cmath>
#include <limits>

#include "core/student/student.h"
#include "core/tail/tail.h"

namespace tailweir::tail {
namespace {

constexpr double kFirst = .3;
constexpr double kLast = 1000;
const double kLogFirst = std::log(kFirst);
const double kStep = (std::log(kLast) - std::log(kFirst)) / static_cast<double>(kGridPoints - 1);
// Share of the mass that the censored variant does not look at.
constexpr double kCensored = .05;
// Log posterior below the maximum at which the rest is nothing.
constexpr double kNothing = 30;

double log_nu(Index k) { return kLogFirst + kStep * static_cast<double>(k); }

// The sample as the profile needs it: delta, masses and what does not depend on nu.
struct Data {
  const double* delta = nullptr;
  const double* mass = nullptr;
  Index n = 0;
  bool equal = false;      // all masses 1/n
  double p = 0;            // p_e
  double mean_log = 0;     // sum v ln delta
  double log_gamma_p = 0;  // lgamma(p_e/2)
  double samples = 0;      // n_eff
  double rate = 10;
};

// sum v delta/(delta + E) and minus its derivative in ln E.
void share_above(const Data& data, double e, double& share, double& slope) {
  share = slope = 0;
  for (Index i = 0; i < data.n; ++i) {
    const double z = data.delta[i] / (data.delta[i] + e);
    share += data.mass[i] * z;
    slope += data.mass[i] * z * (1 - z);
  }
}

// sum v ln(1 + delta/E). Equal masses multiply before they take a logarithm.
double mean_log_one_plus(const Data& data, double e) {
  double sum = 0;
  if (data.equal) {
    double product = 1;
    for (Index i = 0; i < data.n; ++i) {
      product *= 1 + data.delta[i] / e;
      if (product > 1e150) {
        sum += std::log(product);
        product = 1;
      }
    }
    return (sum + std::log(product)) / static_cast<double>(data.n);
  }
  for (Index i = 0; i < data.n; ++i) sum += data.mass[i] * std::log1p(data.delta[i] / e);
  return sum;
}

// ln E with sum v delta/(delta + E) = p/(p + nu), from a guess; the sum falls from 1 to 0 in ln E.
double solve_scale(const Data& data, double nu, double guess) {
  const double target = data.p / (data.p + nu);
  double low = -std::numeric_limits<double>::infinity();
  double high = std::numeric_limits<double>::infinity();
  double e = guess;
  for (int k = 0; k < 100; ++k) {
    double share = 0, slope = 0;
    share_above(data, std::exp(e), share, slope);
    const double miss = share - target;
    (miss > 0 ? low : high) = e;
    // The profile is flat in e at its maximum: 1e-6 here is 1e-12 there.
    if (std::abs(miss) < 1e-6 * slope) return e + miss / slope;
    double next = slope > 0 ? e + miss / slope : e;
    if (!(std::abs(next - e) < 3)) next = e + (miss > 0 ? 3 : -3);
    if (!(next > low && next < high)) next = .5 * (low + high);
    e = next;
  }
  return e;
}

// lp at grid point k; e carries ln E from point to point.
double log_posterior(const Data& data, Index k, double& e) {
  const double nu = std::exp(log_nu(k));
  e = solve_scale(data, nu, e);
  const double profile = student::log_gamma_ratio(data.p, nu) - data.log_gamma_p - data.p * e / 2 +
                         data.p / 2 * data.mean_log -
                         (data.p + nu) / 2 * mean_log_one_plus(data, std::exp(e));
  return data.samples * profile - std::log(data.p * nu / (data.p + nu + 2)) / 2 - 2 * std::log(nu) -
         data.rate / nu;
}

double first_guess(const Data& data, double nu) { return data.mean_log + std::log(nu / data.p); }

// Every point of the grid.
void fill_whole(const Data& data, Eigen::ArrayXd& lp) {
  double e = first_guess(data, grid_nu(0));
  double before = e;
  for (Index k = 0; k < kGridPoints; ++k) {
    double guess = k < 2 ? e + (k == 1 ? kStep : 0) : 2 * e - before;
    before = e;
    lp(k) = log_posterior(data, k, guess);
    e = guess;
  }
}

// Points first, first + stride, ... last; the others inside by cubic interpolation, outside
// nothing. False when the mass may reach outside.
bool fill_narrow(const Data& data, Index first, Index last, Index stride, Eigen::ArrayXd& lp) {
  lp.setConstant(-std::numeric_limits<double>::infinity());
  double e = first_guess(data, grid_nu(first));
  double before = e;
  double top = -std::numeric_limits<double>::infinity();
  for (Index k = first; k <= last; k += stride) {
    double guess = k < first + 2 * stride
                       ? e + (k == first ? 0 : kStep * static_cast<double>(stride))
                       : 2 * e - before;
    before = e;
    lp(k) = log_posterior(data, k, guess);
    e = guess;
    top = std::max(top, lp(k));
  }
  if (first > 0 && !(lp(first) < top - 12)) return false;
  if (last < kGridPoints - 1 && !(lp(last) < top - 12)) return false;
  if (stride == 1) return true;
  for (Index left = first; left < last; left += stride) {
    // Four known points around the gap, shifted inwards at the ends.
    const Index from = std::clamp(left - stride, first, last - 3 * stride);
    for (Index k = left + 1; k < left + stride; ++k) {
      const double x = static_cast<double>(k - from) / static_cast<double>(stride);
      double value = 0;
      for (int j = 0; j < 4; ++j) {
        double basis = 1;
        for (int m = 0; m < 4; ++m) {
          if (m != j) basis *= (x - m) / static_cast<double>(j - m);
        }
        value += basis * lp(from + j * stride);
      }
      lp(k) = value;
    }
  }
  return true;
}

// nu_L and the interval from the log posterior.
void summarise(const Eigen::ArrayXd& lp, NuEstimate& estimate) {
  const double top = lp.maxCoeff();
  double sum = 0, sum_inverse = 0, area = 0, previous = 0;
  for (Index k = 0; k < kGridPoints; ++k) {
    const double w = lp(k) > top - kNothing ? std::exp(lp(k) - top) : 0;
    sum += w;
    sum_inverse += w / grid_nu(k);
    if (k > 0) area += (w + previous) / 2;
    previous = w;
  }
  estimate.unblended = sum / sum_inverse;
  double reached = 0;
  double* bounds[2] = {&estimate.nu_low, &estimate.nu_high};
  const double level[2] = {.025, .975};
  int next = 0;
  previous = lp(0) > top - kNothing ? std::exp(lp(0) - top) : 0;
  estimate.nu_high = kLast;
  estimate.nu_low = kFirst;
  for (Index k = 1; k < kGridPoints && next < 2; ++k) {
    const double w = lp(k) > top - kNothing ? std::exp(lp(k) - top) : 0;
    const double piece = (w + previous) / 2 / area;
    while (next < 2 && reached + piece >= level[next]) {
      const double share = piece > 0 ? (level[next] - reached) / piece : 0;
      *bounds[next++] = std::exp(log_nu(k - 1) + share * kStep);
    }
    reached += piece;
    previous = w;
  }
}

bool prepare(const FitView& fit, const NuSettings& settings, Workspace& workspace, Data& data) {
  const Index n = fit.mass.size();
  data.p = leave_one_out_distances(fit, workspace);
  if (!(data.p > 0) || !std::isfinite(data.p)) return false;
  double square = 0, largest = 0;
  double least_mass = std::numeric_limits<double>::infinity(), most_mass = 0;
  for (Index i = 0; i < n; ++i) {
    double& delta = workspace.delta(i);
    if (!std::isfinite(delta)) return false;
    largest = std::max(largest, delta);
    delta = std::clamp(delta, 1e-300, 1e150);
    const double v = fit.mass(i);
    square += v * v;
    least_mass = std::min(least_mass, v);
    most_mass = std::max(most_mass, v);
    data.mean_log += v * std::log(delta);
  }
  data.delta = workspace.delta.data();
  data.mass = fit.mass.data();
  data.n = n;
  data.equal = least_mass == most_mass;
  data.log_gamma_p = std::lgamma(data.p / 2);
  data.samples = 1 / square;
  data.rate = settings.prior_rate;
  return largest > 0;
}

NuEstimate degenerate(const NuSettings& settings, const NuEstimate* previous) {
  NuEstimate estimate;
  estimate.nu = previous != nullptr ? previous->nu : std::sqrt(settings.floor * settings.ceiling);
  estimate.unblended = estimate.nu;
  estimate.nu_low = settings.floor;
  estimate.nu_high = settings.ceiling;
  estimate.standard_error_log = std::numeric_limits<double>::infinity();
  estimate.status = NuStatus::not_identified;
  return estimate;
}

// Blend weight of the unblended estimate: 1 below nu = 4, 0 above nu = 8, linear in 1/nu between.
double tail_share(double nu) { return std::clamp((1 / nu - 1. / 8) * 8, 0., 1.); }

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

bool blend_applies(const FitView& fit, const Data& data) {
  const double p = static_cast<double>(fit.channels);
  if (data.equal) return p <= .6 * static_cast<double>(data.n);
  return p * fit.mass.maxCoeff() <= .3;
}

}  // namespace

double grid_nu(Index k) { return std::exp(log_nu(k)); }

NuEstimate leave_one_out(const FitView& fit, const NuSettings& settings, Workspace& workspace,
                         const NuEstimate* previous) {
  Data data;
  if (fit.mass.size() < 2 || !prepare(fit, settings, workspace, data)) {
    return degenerate(settings, previous);
  }
  NuEstimate estimate;
  estimate.effective_channels = data.p;
  bool narrow = false;
  if (previous != nullptr && previous->unblended > 0 && previous->nu_high > previous->nu_low) {
    const double centre = std::log(previous->unblended);
    const double below = std::max(centre - std::log(previous->nu_low), .1);
    const double above = std::max(std::log(previous->nu_high) - centre, .1);
    const double from = (centre - 2.8 * below - kLogFirst) / kStep;
    const double to = (centre + 3.2 * above - kLogFirst) / kStep;
    const Index first = std::clamp(static_cast<Index>(from), Index{0}, kGridPoints - 13);
    Index last = std::clamp(static_cast<Index>(to) + 1, first + 12, kGridPoints - 1);
    const Index stride = std::clamp((last - first + 23) / 24, Index{1}, Index{4});
    last = first + (last - first + stride - 1) / stride * stride;
    // The stride must land on the last point: step back into the grid when it overshoots.
    const Index shifted = std::max<Index>(0, first - std::max<Index>(0, last - (kGridPoints - 1)));
    last -= first - shifted;
    narrow = last <= kGridPoints - 1 &&
             fill_narrow(data, shifted, last, stride, workspace.log_posterior);
  }
  if (!narrow) fill_whole(data, workspace.log_posterior);
  if (!std::isfinite(workspace.log_posterior.maxCoeff())) {
    return degenerate(settings, previous);
  }
  summarise(workspace.log_posterior, estimate);
  estimate.nu = estimate.unblended;
  const double share = tail_share(estimate.unblended);
  if (share < 1 && blend_applies(fit, data)) {
    const double moment = light_tail_moment(fit, estimate.unblended);
    estimate.nu = 1 / (1 / moment + share * (1 / estimate.unblended - 1 / moment));
  }
  finish(settings, data.samples, estimate);
  return estimate;
}

// ------------------------------------------------------------------------------------- censored

namespace {

// Log likelihood (per unit mass) of the scaled F with the top share of delta censored at `limit`.
struct Censored {
  const Data& data;
  double limit;
  double above;  // censored mass

  double value(double nu, double e) const {
    const double scale = std::exp(e);
    double sum = 0, mean_log = 0, mass = 0;
    for (Index i = 0; i < data.n; ++i) {
      if (data.delta[i] > limit) continue;
      mass += data.mass[i];
      mean_log += data.mass[i] * std::log(data.delta[i]);
      sum += data.mass[i] * std::log1p(data.delta[i] / scale);
    }
    const double tail = boost::math::ibetac(data.p / 2, nu / 2, limit / (limit + scale));
    return mass * (student::log_gamma_ratio(data.p, nu) - data.log_gamma_p - data.p * e / 2) +
           data.p / 2 * mean_log - (data.p + nu) / 2 * sum +
           (tail > 0 ? above * std::log(tail) : -1e6);
  }
};

// Largest value over e around a guess by golden section: the function is unimodal in e.
double best_scale(const Censored& censored, double nu, double& e) {
  constexpr double kGolden = .6180339887498949;
  double low = e - 2, high = e + 2;
  double a = high - kGolden * (high - low), b = low + kGolden * (high - low);
  double fa = censored.value(nu, a), fb = censored.value(nu, b);
  while (high - low > 1e-5) {
    if (fa > fb) {
      high = b;
      b = a;
      fb = fa;
      a = high - kGolden * (high - low);
      fa = censored.value(nu, a);
    } else {
      low = a;
      a = b;
      fa = fb;
      b = low + kGolden * (high - low);
      fb = censored.value(nu, b);
    }
  }
  e = .5 * (low + high);
  return censored.value(nu, e);
}

}  // namespace

NuEstimate leave_one_out_censored(const FitView& fit, const NuSettings& settings,
                                  Workspace& workspace) {
  Data data;
  if (fit.mass.size() < 2 || !prepare(fit, settings, workspace, data)) {
    return degenerate(settings, nullptr);
  }
  // Weighted quantile: walk down from the largest delta until the share is reached.
  const Index n = data.n;
  double limit = std::numeric_limits<double>::infinity(), above = 0;
  for (;;) {
    double next = 0, mass = 0;
    for (Index i = 0; i < n; ++i) {
      if (workspace.delta(i) < limit && workspace.delta(i) > next) next = workspace.delta(i);
    }
    for (Index i = 0; i < n; ++i) {
      if (workspace.delta(i) == next) mass += fit.mass(i);
    }
    if (!(next > 0) || above + mass > kCensored) {
      limit = next;
      break;
    }
    above += mass;
    limit = next;
  }
  if (!(limit > 0) || !(above > 0)) return leave_one_out(fit, settings, workspace);
  const Censored censored{data, limit, above};
  double e = first_guess(data, grid_nu(0));
  for (Index k = 0; k < kGridPoints; ++k) {
    const double nu = grid_nu(k);
    e += k == 0 ? 0 : kStep;
    const double best = best_scale(censored, nu, e);
    workspace.log_posterior(k) = data.samples * best -
                                 std::log(data.p * nu / (data.p + nu + 2)) / 2 - 2 * std::log(nu) -
                                 data.rate / nu;
  }
  NuEstimate estimate;
  estimate.effective_channels = data.p;
  summarise(workspace.log_posterior, estimate);
  estimate.nu = estimate.unblended;
  finish(settings, data.samples, estimate);
  return estimate;
}

}  // namespace tailweir::tail

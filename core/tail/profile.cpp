#include "core/tail/profile.h"

#include <algorithm>
#include <array>
#include <boost/math/special_functions/beta.hpp>
#include <cmath>
#include <limits>

#include "core/student/student.h"

namespace tailweir::tail {
namespace {

constexpr double kFirst = .3;
constexpr double kLast = 1000;
// Log posterior below the maximum at which the rest is nothing.
constexpr double kNothing = 30;
// Newton steps in e below this are not followed by another: l is evaluated to second order around
// the last point, so the error in l is of the order of the step's cube.
constexpr double kSmallStep = 1e-3;

constexpr std::size_t kLanes = 4;
using Lanes = std::array<double, kLanes>;

double total(const Lanes& lanes) { return (lanes[0] + lanes[1]) + (lanes[2] + lanes[3]); }

// Sums over the distances looked at, at one E.
struct Sums {
  double share = 0;         // sum v delta/(delta + E)
  double slope = 0;         // minus its derivative in e
  double log_one_plus = 0;  // sum v ln(1 + delta/E)
};

// Equal masses multiply before they take a logarithm, so that a pass costs one division a distance.
// Four running sums in a fixed order: faster than one, and the same on every run.
Sums sums_equal(const ScaledF& data, double inverse_scale) {
  constexpr double kFlush = 1e50;  // delta/E stays below 1e150, see fill()
  Lanes share{}, slope{}, product{1, 1, 1, 1};
  double logs = 0;
  const auto add = [&](std::size_t lane, double delta) {
    const double q = delta * inverse_scale;
    const double r = 1 / (1 + q);
    share[lane] += q * r;
    slope[lane] += q * r * r;
    product[lane] *= 1 + q;
  };
  Index i = 0;
  for (; i + 4 <= data.n; i += 4) {
    for (std::size_t l = 0; l < kLanes; ++l) add(l, data.delta[i + static_cast<Index>(l)]);
    if (product[0] > kFlush || product[1] > kFlush || product[2] > kFlush || product[3] > kFlush) {
      for (double& value : product) {
        logs += std::log(value);
        value = 1;
      }
    }
  }
  for (; i < data.n; ++i) add(0, data.delta[i]);
  for (const double value : product) logs += std::log(value);
  const double v = data.n > 0 ? data.mass[0] : 0;
  return {v * total(share), v * total(slope), v * logs};
}

Sums sums_unequal(const ScaledF& data, double inverse_scale, bool logs) {
  Lanes share{}, slope{};
  Index i = 0;
  const auto add = [&](std::size_t lane, Index k) {
    const double q = data.delta[k] * inverse_scale;
    const double r = 1 / (1 + q);
    share[lane] += data.mass[k] * q * r;
    slope[lane] += data.mass[k] * q * r * r;
  };
  for (; i + 4 <= data.n; i += 4) {
    for (std::size_t l = 0; l < kLanes; ++l) add(l, i + static_cast<Index>(l));
  }
  for (; i < data.n; ++i) add(0, i);
  Sums sums{total(share), total(slope), 0};
  if (logs) {
    for (Index k = 0; k < data.n; ++k) {
      sums.log_one_plus += data.mass[k] * std::log1p(data.delta[k] * inverse_scale);
    }
  }
  return sums;
}

// ln of the mass above the limit, the hazard g = -d ln(mass)/d(ln E) < 0 turned positive, and minus
// the hazard's derivative in e.
struct Above {
  double log_mass = 0, hazard = 0, slope = 0;
};

Above above_limit(const ScaledF& data, double nu, double log_beta, double e) {
  const double log_q = std::log(data.limit) - e;                             // ln(c/E)
  const double log_left = log_q > 0 ? -log_q - std::log1p(std::exp(-log_q))  // ln(1 - z)
                                    : -std::log1p(std::exp(log_q));
  const double log_z = log_left + log_q;
  const double z = std::exp(log_z), left = std::exp(log_left);
  const double log_density = data.p / 2 * log_z + nu / 2 * log_left - log_beta;
  const double mass = boost::math::ibetac(data.p / 2, nu / 2, z);
  Above above;
  if (mass > 1e-290) {
    above.log_mass = std::log(mass);
    above.hazard = std::exp(log_density - above.log_mass);
  } else {  // its limit for a far limit
    above.hazard = nu / 2;
    above.log_mass = log_density - std::log(above.hazard);
  }
  above.slope = std::max(0., above.hazard * (above.hazard + data.p / 2 * left - nu / 2 * z));
  return above;
}

// Largest l over e. e: in a guess, out the place of the maximum.
double profile(const ScaledF& data, double nu, double& e) {
  const double log_gamma = student::log_gamma_ratio(data.p, nu) - data.log_gamma_p;
  const double half = (data.p + nu) / 2;
  const double target = data.kept * data.p / 2 / half;
  double low = -std::numeric_limits<double>::infinity();
  double high = std::numeric_limits<double>::infinity();
  double value = 0;
  for (int k = 0; k < 100; ++k) {
    const double inverse_scale = std::exp(-e);
    Sums sums =
        data.equal ? sums_equal(data, inverse_scale) : sums_unequal(data, inverse_scale, false);
    double miss = sums.share - target, slope = sums.slope;
    Above above;
    if (data.above > 0) {
      above = above_limit(data, nu, -log_gamma, e);
      miss += data.above * above.hazard / half;
      slope += data.above * above.slope / half;
    }
    (miss > 0 ? low : high) = e;
    double step = slope > 0 ? miss / slope : std::copysign(3., miss);
    // Distances that leave e without a stationary point within reach end at the hundredth trial.
    const bool last = std::abs(step) < kSmallStep || k == 99;
    if (last) {
      step = std::clamp(step, -kSmallStep, kSmallStep);
      if (!data.equal) sums = sums_unequal(data, inverse_scale, true);
      value = data.kept * (log_gamma - data.p * e / 2) + data.p / 2 * data.mean_log -
              half * sums.log_one_plus + half * miss * step / 2;
      if (data.above > 0) value += data.above * above.log_mass;
      e += step;
      break;
    }
    double next = e + std::clamp(step, -3., 3.);
    if (!(next > low && next < high)) next = .5 * (low + high);
    e = next;
  }
  return value;
}

double log_posterior(const ScaledF& data, Index k, double& e) {
  const double nu = grid_nu(k);
  const double value = profile(data, nu, e);
  return data.samples * value - std::log(data.p * nu / (data.p + nu + 2)) / 2 - 2 * std::log(nu) -
         data.rate / nu;
}

// lp at first, first + stride, ..., last. Quadratic extrapolation of e makes most points one pass.
void fill(const ScaledF& data, Index first, Index last, Index stride, Eigen::ArrayXd& lp) {
  std::array<double, 3> before{};
  Index done = 0;
  for (Index k = first; k <= last; k += stride, ++done) {
    double e = data.mean_log / data.kept + std::log(grid_nu(first) / data.p);
    if (done == 1) e = before[0] + grid_step() * static_cast<double>(stride);
    if (done == 2) e = 2 * before[0] - before[1];
    if (done >= 3) e = 3 * (before[0] - before[1]) + before[2];
    // Never further than what keeps delta/E and its products finite.
    if (done > 0) e = std::clamp(e, before[0] - 1, before[0] + 1);
    e = std::max(e, data.log_largest - 345);
    lp(k) = log_posterior(data, k, e);
    before = {e, before[0], before[1]};
  }
}

}  // namespace

double grid_step() {
  static const double step = std::log(kLast / kFirst) / static_cast<double>(kGridPoints - 1);
  return step;
}

double grid_log_nu(Index k) { return std::log(kFirst) + grid_step() * static_cast<double>(k); }

double grid_nu(Index k) { return std::exp(grid_log_nu(k)); }

void fill_whole(const ScaledF& data, Eigen::ArrayXd& lp) { fill(data, 0, kGridPoints - 1, 1, lp); }

bool fill_narrow(const ScaledF& data, Index first, Index last, Index stride, Eigen::ArrayXd& lp) {
  lp.setConstant(-std::numeric_limits<double>::infinity());
  fill(data, first, last, stride, lp);
  const double top = lp.maxCoeff();
  if (!std::isfinite(top)) return false;
  if (first > 0 && !(lp(first) < top - 12)) return false;
  if (last < kGridPoints - 1 && !(lp(last) < top - 12)) return false;
  if (stride == 1) return true;
  for (Index left = first; left < last; left += stride) {
    // Four known points around the gap, shifted inwards at the ends.
    const Index from = std::clamp(left - stride, first, last - 3 * stride);
    for (Index k = left + 1; k < left + stride; ++k) {
      const double x = static_cast<double>(k - from) / static_cast<double>(stride);
      const double y0 = lp(from), y1 = lp(from + stride);
      const double y2 = lp(from + 2 * stride), y3 = lp(from + 3 * stride);
      // Newton's form of the cubic through the four.
      const double d1 = y1 - y0, d2 = y2 - 2 * y1 + y0, d3 = y3 - 3 * (y2 - y1) - y0;
      lp(k) = y0 + x * (d1 + (x - 1) / 2 * (d2 + (x - 2) / 3 * d3));
    }
  }
  return true;
}

void summarise(const Eigen::ArrayXd& lp, NuEstimate& estimate) {
  const double top = lp.maxCoeff();
  const auto density = [&](Index k) { return lp(k) > top - kNothing ? std::exp(lp(k) - top) : 0; };
  double sum = 0, sum_inverse = 0, area = 0, previous = 0;
  for (Index k = 0; k < kGridPoints; ++k) {
    const double w = density(k);
    if (w > 0) sum_inverse += w / grid_nu(k);
    sum += w;
    if (k > 0) area += (w + previous) / 2;
    previous = w;
  }
  estimate.unblended = sum / sum_inverse;
  const std::array<double, 2> level{.025, .975};
  const std::array<double*, 2> bound{&estimate.nu_low, &estimate.nu_high};
  estimate.nu_low = kFirst;
  estimate.nu_high = kLast;
  double reached = 0;
  std::size_t next = 0;
  previous = density(0);
  for (Index k = 1; k < kGridPoints && next < 2; ++k) {
    const double w = density(k);
    const double piece = (w + previous) / 2 / area;
    while (next < 2 && reached + piece >= level[next]) {
      const double share = piece > 0 ? (level[next] - reached) / piece : 0;
      *bound[next++] = std::exp(grid_log_nu(k - 1) + share * grid_step());
    }
    reached += piece;
    previous = w;
  }
}

}  // namespace tailweir::tail

// Observed-data log likelihood, and nu by its profile.
#include <algorithm>
#include <cassert>
#include <cmath>
#include <limits>
#include <map>
#include <vector>

#include "core/scatter/missing.h"
#include "core/spd/blas.h"
#include "core/student/student.h"

namespace tailweir {
namespace {

constexpr double kHalfChiSquare95 = 1.920729410347062;  // upper 5% point of chi-square(1), halved

// Warm-started fits along nu.
class Profile {
 public:
  Profile(const Eigen::Ref<const Eigen::MatrixXd>& samples,
          const Eigen::Ref<const Eigen::ArrayXd>& mass, const MissingSettings& settings,
          const MissingStart& start)
      : samples_(samples), mass_(mass), settings_(settings), start_(start) {}

  // The fit at exp(log_nu). False when it did not end well.
  bool at(double log_nu) {
    settings_.nu = std::exp(log_nu);
    fit = fit_missing(samples_, mass_, settings_, start_);
    ++fits;
    const bool usable =
        fit.reason == MissingStop::converged || fit.reason == MissingStop::iteration_limit;
    if (usable) {
      start_.scatter = fit.scatter;
      start_.centre = fit.centre;
    }
    return usable;
  }

  double log_likelihood() const { return fit.log_likelihood; }

  // Twice d(log likelihood)/d(nu), scatter and centre held at the fit: by the envelope theorem the
  // slope of the profile.
  double slope() const {
    const double nu = settings_.nu;
    double sum = 0;
    for (Index i = 0; i < mass_.size(); ++i) {
      const double k = fit.observed(i);
      const double z = fit.distance(i) / nu;
      sum += mass_(i) *
             (student::digamma_ratio(k, nu) - k / nu - std::log1p(z) + (nu + k) / nu * z / (1 + z));
    }
    return sum;
  }

  MissingFit fit;
  int fits = 0;

 private:
  const Eigen::Ref<const Eigen::MatrixXd>& samples_;
  const Eigen::Ref<const Eigen::ArrayXd>& mass_;
  MissingSettings settings_;
  MissingStart start_;
};

// Root of value() in [a, b], where it has opposite signs fa, fb, by regula falsi (Illinois).
template <typename Value>
bool find_root(Value value, double a, double fa, double b, double fb, double accuracy,
               double& root) {
  for (int k = 0; k < 60; ++k) {
    root = b - fb * (b - a) / (fb - fa);
    if (!(std::abs(b - a) > accuracy)) return true;
    double f = 0;
    if (!value(root, f)) return false;
    if (f == 0) return true;
    const bool crossed = (f > 0) != (fb > 0);
    const double moved = std::abs(root - b);
    if (crossed) {
      a = b;
      fa = fb;
    } else {
      fa *= .5;
    }
    b = root;
    fb = f;
    if (moved <= accuracy) return true;
  }
  return true;
}

// Walks from log_nu uphill until the slope changes sign; then the root. Sets nu and the flags.
bool climb(Profile& profile, double low, double high, double log_nu, MissingLikelihood& result) {
  double at = std::clamp(log_nu, low, high);
  if (!profile.at(at)) return false;
  double slope = profile.slope();
  double stride = .5;
  for (;;) {
    const double next = std::clamp(slope > 0 ? at + stride : at - stride, low, high);
    if (next == at) {
      result.at_ceiling = at == high;
      result.at_floor = at == low;
      result.nu = std::exp(at);
      return true;
    }
    if (!profile.at(next)) return false;
    const double next_slope = profile.slope();
    if ((next_slope > 0) != (slope > 0)) {
      double root = at;
      const auto value = [&profile](double x, double& f) {
        if (!profile.at(x)) return false;
        f = profile.slope() * std::exp(x);
        return true;
      };
      if (!find_root(value, at, slope * std::exp(at), next, next_slope * std::exp(next), 1e-10,
                     root)) {
        return false;
      }
      result.nu = std::exp(root);
      return profile.at(root);
    }
    at = next;
    slope = next_slope;
    stride *= 2;
  }
}

// End of the 95% interval on one side of log_nu (direction -1 or 1), or the bound.
bool interval_end(Profile& profile, double log_nu, double top, double direction, double bound,
                  double& end) {
  double inside = log_nu, inside_value = kHalfChiSquare95, stride = .15;
  const auto value = [&profile, top](double x, double& f) {
    if (!profile.at(x)) return false;
    f = profile.log_likelihood() - top + kHalfChiSquare95;
    return true;
  };
  end = bound;
  while (direction * (bound - inside) > 0) {
    double next = inside + direction * stride;
    if (direction * (bound - next) < 0) next = bound;
    double f = 0;
    if (!value(next, f)) return false;
    if (f <= 0) return find_root(value, inside, inside_value, next, f, 1e-5, end);
    inside = next;
    inside_value = f;
    stride *= 2;
  }
  return true;
}

}  // namespace

MissingLikelihood fit_missing_likelihood(const Eigen::Ref<const Eigen::MatrixXd>& samples,
                                         const Eigen::Ref<const Eigen::ArrayXd>& mass,
                                         const MissingSettings& settings, double floor,
                                         double ceiling, bool interval, const MissingStart& start) {
  assert(floor > 0 && floor < ceiling);
  const double low =
      std::log(settings.centre == CentreKind::estimated ? std::max(floor, 1.01) : floor);
  const double high = std::max(std::log(ceiling), low + 1e-6);
  MissingLikelihood result;
  Profile profile(samples, mass, settings, start);
  if (climb(profile, low, high, std::log(settings.nu), result)) {
    result.nu_low = result.nu_high = result.nu;
    const MissingFit best = profile.fit;
    const double log_nu = std::log(result.nu), top = best.log_likelihood;
    double end_low = log_nu, end_high = log_nu;
    if (interval && interval_end(profile, log_nu, top, -1, low, end_low) &&
        interval_end(profile, log_nu, top, 1, high, end_high)) {
      result.nu_low = std::exp(end_low);
      result.nu_high = std::exp(end_high);
    }
    result.fit = best;
  } else {
    result.fit = profile.fit;
  }
  result.fits = profile.fits;
  return result;
}

double observed_log_likelihood(const Eigen::Ref<const Eigen::MatrixXd>& samples,
                               const Eigen::Ref<const Eigen::ArrayXd>& mass,
                               const Eigen::Ref<const Eigen::MatrixXd>& scatter,
                               const Eigen::Ref<const Eigen::VectorXd>& centre, double nu) {
  double sum = 0;
  std::vector<Index> seen;
  for (Index i = 0; i < samples.cols(); ++i) {
    seen.clear();
    for (Index j = 0; j < samples.rows(); ++j) {
      if (!std::isnan(samples(j, i))) seen.push_back(j);
    }
    if (seen.empty() || !(mass(i) > 0)) continue;
    const Index k = static_cast<Index>(seen.size());
    Eigen::MatrixXd s(k, k), x(k, 1);
    for (Index a = 0; a < k; ++a) {
      const Index j = seen[static_cast<std::size_t>(a)];
      x(a) = samples(j, i) - centre(j);
      for (Index b = 0; b < k; ++b) s(a, b) = scatter(j, seen[static_cast<std::size_t>(b)]);
    }
    if (!spd::cholesky(s)) return -std::numeric_limits<double>::infinity();
    spd::solve(s, x);
    sum += mass(i) *
           student::log_density(x.squaredNorm(), k, nu, 2 * s.diagonal().array().log().sum());
  }
  return sum;
}

}  // namespace tailweir

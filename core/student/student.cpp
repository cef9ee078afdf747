#include "core/student/student.h"

#include <algorithm>
#include <boost/math/distributions/students_t.hpp>
#include <boost/math/policies/policy.hpp>
#include <boost/math/special_functions/beta.hpp>
#include <boost/math/special_functions/digamma.hpp>
#include <boost/math/special_functions/gamma.hpp>
#include <boost/math/special_functions/trigamma.hpp>
#include <cassert>
#include <cmath>
#include <limits>
#include <numbers>

namespace tailweir::student {
namespace {

// double is enough (long double would be an order slower and differ between machines); errors give
// infinities or not-a-number, which callers test.
using Policy = boost::math::policies::policy<
    boost::math::policies::promote_double<false>,
    boost::math::policies::domain_error<boost::math::policies::errno_on_error>,
    boost::math::policies::pole_error<boost::math::policies::errno_on_error>,
    boost::math::policies::overflow_error<boost::math::policies::errno_on_error>,
    boost::math::policies::evaluation_error<boost::math::policies::errno_on_error>>;

// From here on Stirling's series to the eighth power is exact to rounding.
constexpr double kAsymptotic = 20;

double stirling_rest(double x) {
  const double y = 1 / (x * x);
  return (1. / 12 - y * (1. / 360 - y * (1. / 1260 - y / 1680))) / x;
}

double log_gamma(double x) { return boost::math::lgamma(x, Policy()); }

// ln Gamma(a + b) - ln Gamma(a) - b ln a, a > 0, b >= 0.
double gamma_excess(double a, double b) {
  if (a < kAsymptotic) return log_gamma(a + b) - log_gamma(a) - b * std::log(a);
  return (a + b - .5) * std::log1p(b / a) - b + stirling_rest(a + b) - stirling_rest(a);
}

// psi(x) - ln x for x >= kAsymptotic.
double digamma_rest(double x) {
  const double y = 1 / (x * x);
  return -.5 / x - y * (1. / 12 - y * (1. / 120 - y * (1. / 252 - y / 240)));
}

}  // namespace

double log_gamma_ratio(double p, double nu) {
  assert(p >= 0 && nu > 0);
  return gamma_excess(nu / 2, p / 2) + p / 2 * std::log(nu / 2);
}

double digamma(double x) { return boost::math::digamma(x, Policy()); }

double digamma_ratio(double p, double nu) {
  const double a = nu / 2;
  const double b = p / 2;
  if (a < kAsymptotic) return digamma(a + b) - digamma(a);
  return std::log1p(b / a) + digamma_rest(a + b) - digamma_rest(a);
}

double trigamma(double x) { return boost::math::trigamma(x, Policy()); }

double log_density(double distance, Index channels, double nu, double log_det_scatter) {
  const double p = static_cast<double>(channels);
  return gamma_excess(nu / 2, p / 2) - p / 2 * std::log(2 * std::numbers::pi) -
         log_det_scatter / 2 - (p + nu) / 2 * std::log1p(distance / nu);
}

double log_density_of_log_distance(double y, double channels, double nu) {
  const double p = channels;
  const double z = y - std::log(nu);  // ln(d/nu)
  const double log_one_plus = z > 30 ? z + std::log1p(std::exp(-z)) : std::log1p(std::exp(z));
  return gamma_excess(nu / 2, p / 2) - log_gamma(p / 2) + p / 2 * (y - std::numbers::ln2) -
         (p + nu) / 2 * log_one_plus;
}

double tail_probability(double distance, double channels, double nu) {
  if (std::isnan(distance)) return distance;
  if (distance <= 0) return 1;
  if (std::isinf(distance)) return 0;
  if (nu > 1e9) return boost::math::gamma_q(channels / 2, distance / 2, Policy());
  return boost::math::ibeta(nu / 2, channels / 2, nu / (nu + distance), Policy());
}

double information_nu(double channels, double nu) {
  const double p = channels;
  return (trigamma(nu / 2) - trigamma((nu + p) / 2)) / 4 -
         p * (p + nu + 4) / (2 * nu * (p + nu) * (p + nu + 2));
}

double information_nu_scale_profiled(double channels, double nu) {
  const double p = channels;
  return information_nu(p, nu) - 2 * p / (nu * (nu + p) * (nu + p) * (nu + p + 2));
}

double two_sided_t_probability(double t, double degrees) {
  if (std::isnan(t)) return t;
  return tail_probability(t * t, 1, degrees);
}

double quantile(double level, double nu) {
  return boost::math::quantile(boost::math::students_t_distribution<double, Policy>(nu), level);
}

double expected_shortfall(double level, double nu) {
  if (!(nu > 1)) return std::numeric_limits<double>::infinity();
  const double q = quantile(level, nu);
  return std::exp(log_density(q * q, 1, nu, 0)) / (1 - level) * (nu + q * q) / (nu - 1);
}

}  // namespace tailweir::student

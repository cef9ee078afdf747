// The multivariate t distribution: densities, tail probabilities and information, stable for every
// nu in (0, 1e12] and every p >= 1.
//
// For x ~ t_p(m, S, nu), d = (x - m)' S^-1 (x - m) and d/p ~ F(p, nu).
//   ln f(x) = lgamma((p+nu)/2) - lgamma(nu/2) - (p/2) ln(nu pi) - ln det(S)/2
//             - ((p+nu)/2) ln(1 + d/nu).
// Published source: Lange, Little & Taylor, J. Amer. Statist. Assoc. 84, 1989. Boost.Math computes
// the special functions. Cost O(1) everywhere. Thread rule: pure functions.
#pragma once

#include "core/settings.h"

namespace tailweir::student {

// lgamma((p + nu)/2) - lgamma(nu/2), without cancellation for large nu. p >= 0, nu > 0.
double log_gamma_ratio(double p, double nu);

// digamma and the difference psi((p + nu)/2) - psi(nu/2) without cancellation.
double digamma(double x);
double digamma_ratio(double p, double nu);
double trigamma(double x);

// ln f(x) from the squared Mahalanobis distance d >= 0 and ln det(S). -infinity when d is infinite.
double log_density(double distance, Index channels, double nu, double log_det_scatter);

// lf(y; p, nu): log density of y = ln d under d/p ~ F(p, nu). Any finite y.
double log_density_of_log_distance(double y, double channels, double nu);

// P(D >= distance) for D/p ~ F(p, nu). distance >= 0; 1 at 0, 0 at infinity. nu above 1e9 uses the
// chi-square limit.
double tail_probability(double distance, double channels, double nu);

// Fisher information for nu in one sample, scatter known (I_nunu) and scale profiled (I_eff).
double information_nu(double channels, double nu);
double information_nu_scale_profiled(double channels, double nu);

// Upper quantile of |T|, T ~ t with `degrees` degrees of freedom, two-sided: P(|T| >= |t|).
double two_sided_t_probability(double t, double degrees);

// t quantile and expected shortfall of the standard t with nu degrees at level in (0.5, 1):
// value-at-risk q with P(T > q) = 1 - level; shortfall E[T | T > q] (nu > 1).
double quantile(double level, double nu);
double expected_shortfall(double level, double nu);

}  // namespace tailweir::student

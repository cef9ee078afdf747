// Profile log likelihood of distances that follow a scaled F law, and the posterior of nu on a
// grid.
//
// delta_i ~ s p_e F(p_e, nu) with masses v_i; e = ln(s nu), E = exp e. Per unit mass, constants
// that depend on neither nu nor e dropped:
//   l(nu, e) = K (lgr(p_e, nu) - p_e e/2) + (p_e/2) sum v ln delta
//              - ((p_e + nu)/2) sum v ln(1 + delta/E) + A ln ibetac(p_e/2, nu/2, c/(c + E)),
// sums over the distances looked at (mass K), A = 1 - K the mass censored above c (0 unless the
// censored variant is asked for), lgr(p, nu) = ln Gamma((p + nu)/2)/(Gamma(nu/2) Gamma(p/2)).
// l is strictly concave in e: the law of ln delta has a log-concave density, hence a log-concave
// survival function. Derived in core/tail/README.md. Thread rule: pure functions; internal to
// core/tail.
#pragma once

#include "core/tail/tail.h"

namespace tailweir::tail {

// The distances as the profile needs them. Pointers belong to the caller.
struct ScaledF {
  const double* delta = nullptr;  // > 0, finite
  const double* mass = nullptr;   // v_i
  Index n = 0;
  bool equal = false;      // all v_i the same
  double p = 0;            // p_e > 0
  double mean_log = 0;     // sum v ln delta
  double log_largest = 0;  // ln of the largest delta; none is below 1e-150 of it
  double log_gamma_p = 0;  // lgamma(p_e/2)
  double samples = 0;      // n_eff
  double rate = 10;        // of the Gamma(2, rate) prior on 1/nu
  double kept = 1;         // K
  double above = 0;        // A
  double limit = 0;        // c
};

// ln(nu) of grid point k, and the spacing.
double grid_log_nu(Index k);
double grid_step();

// Fills lp with the log posterior (up to a constant) at every grid point.
void fill_whole(const ScaledF& data, Eigen::ArrayXd& lp);

// The same at every stride-th point of first..last (last - first a multiple of stride, at least 3
// strides); the points between by cubic interpolation, outside -infinity. False when mass may lie
// outside.
bool fill_narrow(const ScaledF& data, Index first, Index last, Index stride, Eigen::ArrayXd& lp);

// nu_L into unblended, and the interval into nu_low and nu_high, from the log posterior. Its
// largest value must be finite.
void summarise(const Eigen::ArrayXd& lp, NuEstimate& estimate);

}  // namespace tailweir::tail

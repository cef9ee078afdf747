// The leave-one-out weight: one Newton-like step in weight space for a single sample.
//
// With A = sum_i omega_i w_i x_i x_i', W = sum omega_i w_i, M = sum omega_i and S = A/W, take
// sample j out of A, call d1 its squared distance x' S_(-j)^-1 x to what is left (W held), and put
// it back with the weight u that agrees with itself: u = (p + nu)/(nu + d) at d = d1/(1 + c u), c =
// omega_j d1/M. That is the positive root of nu c u^2 + (nu + d1 - (p + nu) c) u - (p + nu) = 0.
// Iterating it over all samples reaches the fixed point of Kent, Tyler & Vardi (1994) several times
// faster than the textbook weight; derivation in core/scatter/README.md. Thread rule: pure
// functions.
#pragma once

#include <cmath>

namespace tailweir {

// d1 >= 0, c >= 0, nu > 0, p >= 1. Returns u > 0, finite whenever the arguments are.
inline double leave_one_out_weight(double d1, double c, double nu, double p) {
  const double b = nu + d1 - (p + nu) * c;
  const double root = std::sqrt(b * b + 4 * nu * c * (p + nu));
  // Two algebraically equal forms; each is used where it does not cancel.
  return b > 0 ? 2 * (p + nu) / (b + root) : (root - b) / (2 * nu * c);
}

// Gains that turn the change of one fixed-point step into the distance still to go: shape and
// scale.
inline double shape_gain(double nu, double p) { return (p + nu + 2) / (p + nu); }
inline double scale_gain(double nu, double p) { return (p + nu + 2) / nu; }

}  // namespace tailweir

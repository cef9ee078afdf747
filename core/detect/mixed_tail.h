// Tail probabilities of squared distances to a scatter that was itself estimated ("mixed F").
//
// With S estimated from n samples the predictive distance is inflated. For a block of g of p
// channels
//   E over c ~ chi2_m of SF_F(ratio c/m; g, k)
// where SF_F is the tail of the F distribution and m the degrees of freedom left in S. For the
// joint distance D (g = p, k = nu): centre known m = n - p + 1, ratio = D m/(n p); centre estimated
// m = n - p, ratio = D m/((n + 1) p). For k -> infinity it is F(g, m) exactly. Published source for
// that limit: Hotelling, Annals of Mathematical Statistics 2, 1931; the mixture is derived in
// core/detect/README.md.
//
// Computed by trapezoid nodes in ln c between the chi2_m quantiles 1e-9 and 1 - 1e-6: 17 for
// m >= 10 (relative error below 1e-5 down to p-values of 1e-6), 65 below. Thread rule: one owner
// (PredictiveTail remembers what it computed).
#pragma once

#include <array>

#include "core/detect/cached_tail.h"

namespace tailweir::detect {

class MixedTail {
 public:
  MixedTail() = default;
  // m > 0: degrees of freedom of the scatter. No allocation.
  explicit MixedTail(double m);

  double degrees() const { return m_; }
  // E SF_F(ratio c/m; g, k), ratio >= 0, g > 0, k > 0. Costs one incomplete beta function a node.
  double probability(double ratio, double g, double k) const;

 private:
  double m_ = 0;
  int nodes_ = 0;
  std::array<double, 65> scale_{}, weight_{};  // c/m and its mass
};

// P(D >= distance) of the joint distance for one (p, n, nu).
class PredictiveTail {
 public:
  // channels p >= 1; samples n (or n_eff); nu > 0; centre_estimated as the scatter's. When n leaves
  // no degrees of freedom (m <= 0) the tail is undefined and p_value() returns NaN.
  PredictiveTail() = default;
  PredictiveTail(double channels, double samples, double nu, bool centre_estimated);

  bool defined() const { return ratio_per_distance_ > 0; }
  bool same(double channels, double samples, double nu, bool centre_estimated) const {
    return channels == channels_ && samples == samples_ && nu == nu_ &&
           centre_estimated == centre_estimated_;
  }
  // By the nodes; distance >= 0.
  double exact(double distance) const;
  // The same, remembered and interpolated (cached_tail.h).
  double p_value(double distance);

 private:
  double channels_ = 0, samples_ = 0, nu_ = 0;
  bool centre_estimated_ = false;
  double ratio_per_distance_ = 0;
  MixedTail tail_;
  CachedTail cache_;
};

}  // namespace tailweir::detect

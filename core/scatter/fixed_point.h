// Cold (from scratch) t M-estimation of scatter and centre for given nu, to the exact fixed point.
//
//   S = sum_i v_i u(d_i) (x_i - m)(x_i - m)',  m = sum_i v_i u(d_i) x_i / sum_i v_i u(d_i),
//   u(d) = (p + nu)/(nu + d),  d_i = (x_i - m)' S^-1 (x_i - m),  sum_i v_i = 1.
//
// Published source: Kent, Tyler & Vardi, "A curious likelihood identity for the multivariate
// t-distribution", Communications in Statistics: Simulation and Computation 23, 1994 (the fixed
// point, the normalisation by sum v u, and the centre by augmenting samples with a 1 at nu - 1).
// The leave-one-out weights that make it fast are derived in core/scatter/README.md.
//
// This is the plain way: O(n p^2) an iteration, allocating. The streaming way is
// core/scatter/tracker.h; both meet at the same fixed point. Thread rule: pure functions.
#pragma once

#include <Eigen/Core>

#include "core/settings.h"

namespace tailweir {

enum class StopReason {
  converged,              // residual <= tolerance
  iteration_limit,        // max_iterations reached; the last iterate is returned
  not_positive_definite,  // samples span less than p dimensions, or an iterate failed to factorise
  not_finite              // a sample or an iterate holds a value that is not finite
};

struct FixedPointSettings {
  double nu = 4;  // > 0; > 1 when the centre is estimated
  CentreKind centre = CentreKind::zero;
  Eigen::VectorXd given_centre;  // p values, for CentreKind::given
  double tolerance = 1e-12;      // on the residual (affine-invariant distance), > 0
  int max_iterations = 1000;     // >= 1
};

struct FixedPoint {
  StopReason reason = StopReason::iteration_limit;
  Eigen::MatrixXd scatter;  // p x p, symmetric positive definite (when converged)
  Eigen::VectorXd centre;   // p
  Eigen::ArrayXd weight;    // u(d_i), n
  Eigen::ArrayXd distance;  // d_i, n, squared Mahalanobis at scatter and centre
  double log_det = 0;       // ln det(scatter)
  double residual = 0;      // estimated distance of the returned scatter to the fixed point
  int iterations = 0;
};

// samples: p x n, one sample a column, finite. mass: n non-negative values, any positive sum (they
// are divided by it). start: optional p x p positive definite first iterate (empty: the scale-free
// start described in the .cpp). On not_positive_definite and not_finite the matrices are
// unspecified and must not be used. Allocates O(n p + p^2).
FixedPoint fit_scatter(const Eigen::Ref<const Eigen::MatrixXd>& samples,
                       const Eigen::Ref<const Eigen::ArrayXd>& mass,
                       const FixedPointSettings& settings,
                       const Eigen::MatrixXd& start = Eigen::MatrixXd());

}  // namespace tailweir

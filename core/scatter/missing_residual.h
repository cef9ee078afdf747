// How far a scatter is from the fixed point when entries are missing.
//
// Whitened by the state, the step of the fixed point is R = L^-1 (G - S) L^-T, G with
// leave-one-out weights. To first order R = K(E), E the whitened distance still to go and K the
// expected information of the observed entries (derived here; for complete samples it is the gains
// of weight.h): with N_g the whitened directions that pattern g misses, Q = I - N N', k = |o|,
//   K(E) = sum_g mass_g [ (k + nu)/(k + nu + 2) (QEQ - (tr QEQ/k) Q) + nu/(k + nu + 2) (tr QEQ/k) Q
//   ].
// The published residual is |K^-1 R|_F, by conjugate gradients. Internal to the missing-entries
// fit. Thread rule: pure functions.
#pragma once

#include <Eigen/Core>

#include "core/scatter/missing_data.h"

namespace tailweir {

// factor: Cholesky factor of the (lifted) state, precision: its inverse (whole), moments: L^-1 G
// L^-T (whole), not divided by the sum of weights. O(sum over patterns of |m| p^2) per conjugate
// gradient step, about ten of them. Allocates.
double missing_residual(const MissingData& data, const Eigen::MatrixXd& factor,
                        const Eigen::MatrixXd& precision, const Eigen::MatrixXd& moments,
                        double nu);

}  // namespace tailweir

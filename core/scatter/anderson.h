// Anderson mixing: extrapolates a fixed-point iteration x <- g(x) from its last few steps.
//
// With residuals f_k = g(x_k) - x_k (in any norm the caller likes), the next iterate is
// g_k - sum_j gamma_j (g_{j+1} - g_j), gamma minimising |f_k - sum_j gamma_j (f_{j+1} - f_j)|.
// Published source: Walker & Ni, "Anderson acceleration for fixed-point iterations", SIAM J.
// Numerical Analysis 49, 2011. It does not know what a good step is: the caller checks the iterate
// and calls reset() to go back to plain steps. Thread rule: one owner.
#pragma once

#include <Eigen/Core>

namespace tailweir {

class Anderson {
 public:
  // depth >= 1: differences kept.
  explicit Anderson(Eigen::Index depth = 5) : depth_(depth) {}

  void reset() { held_ = -1; }

  // residual f_k and image g_k (sizes fixed until reset). Returns the mixed next iterate; g_k
  // itself on the first call, or when the differences are not finite. O(depth (|f| depth + |g|)).
  Eigen::VectorXd mix(const Eigen::VectorXd& residual, const Eigen::VectorXd& image);

 private:
  Eigen::Index depth_;
  Eigen::Index held_ = -1;  // differences held; -1 before the first call
  Eigen::Index next_ = 0;   // column written next
  Eigen::VectorXd last_residual_, last_image_;
  Eigen::MatrixXd residual_steps_, image_steps_;
};

}  // namespace tailweir

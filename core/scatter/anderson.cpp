#include "core/scatter/anderson.h"

#include <Eigen/QR>
#include <algorithm>

namespace tailweir {

Eigen::VectorXd Anderson::mix(const Eigen::VectorXd& residual, const Eigen::VectorXd& image) {
  Eigen::VectorXd mixed = image;
  if (held_ < 0) {
    residual_steps_.resize(residual.size(), depth_);
    image_steps_.resize(image.size(), depth_);
    held_ = next_ = 0;
  } else {
    residual_steps_.col(next_) = residual - last_residual_;
    image_steps_.col(next_) = image - last_image_;
    next_ = (next_ + 1) % depth_;
    held_ = std::min(held_ + 1, depth_);
    // Columns in their own length: what matters is their angles.
    Eigen::MatrixXd steps = residual_steps_.leftCols(held_);
    const Eigen::VectorXd length = steps.colwise().norm().transpose().cwiseMax(1e-300);
    steps = steps * length.cwiseInverse().asDiagonal();
    Eigen::ColPivHouseholderQR<Eigen::MatrixXd> solver(steps);
    solver.setThreshold(1e-8);
    const Eigen::VectorXd gamma = solver.solve(residual).cwiseQuotient(length);
    if (gamma.allFinite()) mixed -= image_steps_.leftCols(held_) * gamma;
    if (!mixed.allFinite()) mixed = image;
  }
  last_residual_ = residual;
  last_image_ = image;
  return mixed;
}

}  // namespace tailweir

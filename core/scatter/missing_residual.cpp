#include "core/scatter/missing_residual.h"

#include <cmath>
#include <limits>
#include <vector>

#include "core/scatter/weight.h"
#include "core/spd/blas.h"

namespace tailweir {
namespace {

// Whitened directions a pattern misses: orthonormal columns, p x |m|.
bool missing_directions(const MissingPattern& pattern, const MissingData& data,
                        const Eigen::MatrixXd& factor, const Eigen::MatrixXd& precision,
                        Eigen::MatrixXd& directions) {
  const Index m = static_cast<Index>(pattern.missing.size());
  Eigen::MatrixXd block(m, m);
  for (Index k = 0; k < m; ++k) {
    for (Index l = 0; l < m; ++l) {
      block(l, k) = precision(pattern.missing[static_cast<std::size_t>(l)],
                              pattern.missing[static_cast<std::size_t>(k)]);
    }
  }
  if (!spd::cholesky(block)) return false;
  Eigen::MatrixXd root = Eigen::MatrixXd::Identity(m, m);
  spd::solve_transposed(block, root);
  Eigen::MatrixXd lifted = Eigen::MatrixXd::Zero(data.channels + data.lift, m);
  for (Index k = 0; k < m; ++k) {
    lifted.row(pattern.missing[static_cast<std::size_t>(k)]) = root.row(k);
  }
  spd::solve(factor, lifted);
  directions = lifted.bottomRows(data.channels);
  return true;
}

class Information {
 public:
  Information(const MissingData& data, double nu) : data_(data), nu_(nu) {}

  bool prepare(const Eigen::MatrixXd& factor, const Eigen::MatrixXd& precision) {
    directions_.resize(data_.patterns.size());
    for (std::size_t g = 0; g < data_.patterns.size(); ++g) {
      if (!missing_directions(data_.patterns[g], data_, factor, precision, directions_[g])) {
        return false;
      }
    }
    return true;
  }

  // K(e), e symmetric.
  Eigen::MatrixXd apply(const Eigen::MatrixXd& e) const {
    const Index p = data_.channels;
    Eigen::MatrixXd sum = Eigen::MatrixXd::Zero(p, p);
    for (std::size_t g = 0; g < data_.patterns.size(); ++g) {
      const Eigen::MatrixXd& n = directions_[g];
      const double k = static_cast<double>(p - n.cols());
      const double shape = data_.patterns[g].mass / shape_gain(nu_, k);
      const double scale = data_.patterns[g].mass / scale_gain(nu_, k);
      // QEQ = E - N H' - H N', H = EN - N (N'EN)/2.
      Eigen::MatrixXd h = e * n;
      const Eigen::MatrixXd inner = n.transpose() * h;
      const double mean = (e.trace() - inner.trace()) / k;
      h -= .5 * n * inner;
      sum += shape * e;
      sum.diagonal().array() += (scale - shape) * mean;
      if (n.cols() == 0) continue;
      const Eigen::MatrixXd cross = (shape * h + .5 * (scale - shape) * mean * n) * n.transpose();
      sum -= cross;
      sum -= cross.transpose();
    }
    return sum;
  }

 private:
  const MissingData& data_;
  double nu_;
  std::vector<Eigen::MatrixXd> directions_;
};

double inner_product(const Eigen::MatrixXd& a, const Eigen::MatrixXd& b) {
  return a.cwiseProduct(b).sum();
}

}  // namespace

double missing_residual(const MissingData& data, const Eigen::MatrixXd& factor,
                        const Eigen::MatrixXd& precision, const Eigen::MatrixXd& moments,
                        double nu) {
  const Index p = data.channels;
  Eigen::MatrixXd rest = moments.bottomRightCorner(p, p);
  if (data.lift == 1) {
    const Eigen::VectorXd m = moments.col(0).tail(p);
    rest -= m * m.transpose();
  }
  rest.diagonal().array() -= 1;
  Information information(data, nu);
  if (!information.prepare(factor, precision)) return std::numeric_limits<double>::infinity();
  // A thousandth of the residual is far below what the first-order argument leaves.
  constexpr double kAccuracy = 1e-3;
  constexpr int kMost = 60;
  Eigen::MatrixXd distance = Eigen::MatrixXd::Zero(p, p), direction = rest;
  double square = rest.squaredNorm();
  const double enough = kAccuracy * kAccuracy * square;
  for (int k = 0; k < kMost && square > enough; ++k) {
    const Eigen::MatrixXd image = information.apply(direction);
    const double curvature = inner_product(direction, image);
    if (!(curvature > 0)) break;
    const double length = square / curvature;
    distance += length * direction;
    rest -= length * image;
    const double next = rest.squaredNorm();
    direction = rest + next / square * direction;
    square = next;
  }
  return distance.norm();
}

}  // namespace tailweir

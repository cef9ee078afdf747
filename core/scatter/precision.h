// P, the inverse of a sum of weighted outer products, kept current by rank-one terms.
//
// A rank-one term is queued and applied by the next pass over the matrix (core/scatter/kernel.h),
// so that a sample costs one pass: apply what the last sample left, multiply by what this one
// brings. This is the only place that holds an explicit inverse. Storage: lower triangle, padded to
// multiples of 4, 4 x 4 diagonal blocks whole. No allocation after construction. Thread rule: one
// owner.
#pragma once

#include <Eigen/Core>
#include <vector>

#include "core/settings.h"
#include "core/spd/blas.h"

namespace tailweir {

class Precision {
 public:
  // dimension >= 1.
  explicit Precision(Index dimension = 1);

  Index dimension() const { return dimension_; }
  Index padded() const { return padded_; }  // rows a vector argument must have; padding zero

  // y = P x, applying queued terms on the way. padded values each.
  void multiply(const double* x, double* y);
  // The same for two vectors in one pass.
  void multiply(const double* x, double* y, const double* x2, double* y2);

  // Queues P <- P + factor v v' (v is copied). At most two terms wait; a third applies them first.
  void add(double factor, const double* v);
  // Applies what is queued.
  void settle();

  // P <- factor P, factor > 0. Settles.
  void scale(double factor);

  // P(i, j), i >= j. Precondition: nothing is queued (after multiply or settle).
  double entry(Index i, Index j) const { return data_[static_cast<std::size_t>(j * stride_ + i)]; }

  // The lower triangle in place, dimension x dimension; what lies above it is unspecified.
  // Precondition: nothing is queued.
  Eigen::Map<const Eigen::MatrixXd, 0, Eigen::OuterStride<>> view() const {
    return {data_.data(), dimension_, dimension_, Eigen::OuterStride<>(stride_)};
  }

  // Writes the lower triangle to a dimension x dimension matrix. Precondition: nothing is queued.
  void copy_to(spd::MatrixRef lower) const;
  // Takes the lower triangle of a dimension x dimension matrix; forgets what was queued.
  void assign(const spd::ConstMatrixRef& lower);

  // y = P e_j, column j, dimension values. Precondition: nothing is queued. O(p).
  void column(Index j, double* y) const;

  // Appends the queue and the triangle to a checkpoint, or reads them back.
  template <typename Archive>
  void archive(Archive& a) {
    a(data_, pending_, factor_, queued_);
  }

  friend void swap(Precision& a, Precision& b) noexcept;

 private:
  void run(int products, const double* x, double* y, const double* x2, double* y2);

  Index dimension_, padded_, stride_;
  std::vector<double> data_;
  std::vector<double> pending_;  // two padded vectors
  std::vector<double> factor_;   // their factors
  int queued_ = 0;
};

}  // namespace tailweir

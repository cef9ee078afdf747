#include "core/scatter/precision.h"

#include <algorithm>
#include <cassert>
#include <utility>

#include "core/scatter/kernel.h"

namespace tailweir {
namespace {

// Columns a multiple of 4 kB apart fall on the same cache sets: move them.
Index stride_for(Index padded) { return padded % 512 == 0 ? padded + 8 : padded; }

}  // namespace

Precision::Precision(Index dimension)
    : dimension_(dimension),
      padded_((dimension + 3) / 4 * 4),
      stride_(stride_for(padded_)),
      data_(static_cast<std::size_t>(stride_ * padded_), 0.0),
      pending_(static_cast<std::size_t>(2 * padded_), 0.0),
      factor_(2, 0.0) {
  assert(dimension >= 1);
}

void Precision::run(int products, const double* x, double* y, const double* x2, double* y2) {
  kernel::Pass pass;
  pass.matrix = data_.data();
  pass.padded = padded_;
  pass.stride = stride_;
  pass.updates = queued_;
  pass.update[0] = {factor_[0], pending_.data()};
  pass.update[1] = {factor_[1], pending_.data() + padded_};
  pass.products = products;
  pass.product[0] = {x, y};
  pass.product[1] = {x2, y2};
  kernel::run(pass);
  queued_ = 0;
}

void Precision::multiply(const double* x, double* y) { run(1, x, y, nullptr, nullptr); }

void Precision::multiply(const double* x, double* y, const double* x2, double* y2) {
  run(2, x, y, x2, y2);
}

void Precision::add(double factor, const double* v) {
  if (queued_ == 2) settle();
  std::copy(v, v + padded_, pending_.begin() + queued_ * padded_);
  factor_[static_cast<std::size_t>(queued_)] = factor;
  ++queued_;
}

void Precision::settle() {
  if (queued_ > 0) run(0, nullptr, nullptr, nullptr, nullptr);
}

void Precision::scale(double factor) {
  settle();
  for (double& value : data_) value *= factor;
}

void Precision::copy_to(spd::MatrixRef lower) const {
  assert(queued_ == 0 && lower.rows() == dimension_ && lower.cols() == dimension_);
  for (Index j = 0; j < dimension_; ++j) {
    for (Index i = j; i < dimension_; ++i) lower(i, j) = entry(i, j);
  }
}

void Precision::assign(const spd::ConstMatrixRef& lower) {
  assert(lower.rows() == dimension_ && lower.cols() == dimension_);
  queued_ = 0;
  for (Index j = 0; j < dimension_; ++j) {
    double* column = data_.data() + j * stride_;
    for (Index i = j; i < dimension_; ++i) column[i] = lower(i, j);
  }
  for (Index block = 0; block < padded_; block += 4) {  // diagonal blocks are stored whole
    const Index end = std::min(block + 4, dimension_);
    for (Index j = block; j < end; ++j) {
      for (Index i = j + 1; i < end; ++i) {
        data_[static_cast<std::size_t>(i * stride_ + j)] = entry(i, j);
      }
    }
  }
}

void Precision::column(Index j, double* y) const {
  assert(queued_ == 0);
  for (Index i = 0; i < j; ++i) y[i] = entry(j, i);
  for (Index i = j; i < dimension_; ++i) y[i] = entry(i, j);
}

void swap(Precision& a, Precision& b) noexcept {
  std::swap(a.dimension_, b.dimension_);
  std::swap(a.padded_, b.padded_);
  std::swap(a.stride_, b.stride_);
  a.data_.swap(b.data_);
  a.pending_.swap(b.pending_);
  a.factor_.swap(b.factor_);
  std::swap(a.queued_, b.queued_);
}

}  // namespace tailweir

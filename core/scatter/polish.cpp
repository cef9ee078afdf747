#include "core/scatter/polish.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <limits>

#include "core/scatter/weight.h"
#include "core/spd/blas.h"

namespace tailweir {
namespace {

// Multiply-adds of one step: about a quarter of a millisecond of BLAS on a present core, so that a
// step and the sample's own pass stay below 2 ms also at p = 300 on a slow one.
constexpr double kStepWork = 2e6;
// Widest block of columns: beyond it BLAS gains nothing more.
constexpr Index kWidestBlock = 256;

}  // namespace

Polish::Polish(Index dimension, Index lift)
    : dimension_(dimension),
      lift_(lift),
      factor_(dimension, dimension),
      gram_(dimension, dimension),
      z_(dimension, dimension),
      formed_(dimension, dimension),
      directions_(
          Eigen::MatrixXd::Constant(dimension, 2, 1 / std::sqrt(static_cast<double>(dimension)))),
      next_(dimension) {
  columns_.resize(dimension, columns_a_step());
  const std::size_t padded = static_cast<std::size_t>(next_.padded());
  x_.assign(padded, 0);
  y_.assign(padded, 0);
  x2_.assign(padded, 0);
  y2_.assign(padded, 0);
}

Index Polish::columns_a_step() const {
  const double d = static_cast<double>(dimension_);
  return std::clamp(static_cast<Index>(kStepWork / (d * d)), Index{16}, kWidestBlock);
}

double Polish::cost(Index dimension, Index n, bool tail) {
  const double d = static_cast<double>(dimension);
  return d * d * static_cast<double>(n) + d * d * d * (tail ? 2.4 : 1.4);
}

void Polish::start(Precision& precision, const SampleRing& ring, const PolishStart& from) {
  precision.settle();
  precision.copy_to(factor_);
  from_ = from;
  first_ = ring.begin();
  last_ = ring.end();
  cursor_ = first_;
  gram_.setZero();
  total_ = from.tail_total;
  stage_ = Stage::factor;
}

void Polish::step(SampleRing& ring, const Eigen::MatrixXd& tail) {
  switch (stage_) {
    case Stage::factor:
      return factor();
    case Stage::condition:
      estimate_condition();
      stage_ = Stage::samples;
      return;
    case Stage::samples:
      samples(ring);
      if (cursor_ == last_) stage_ = tail.size() > 0 ? Stage::tail : Stage::judge;
      return;
    case Stage::tail:
      return add_tail(tail);
    case Stage::judge:
      return judge();
    case Stage::solve:
      return solve();
    case Stage::form:
      return form();
    case Stage::replay:
      return replay(ring);
    default:
      return;
  }
}

void Polish::factor() {
  if (!spd::cholesky(factor_)) {
    stage_ = Stage::failed;
    return;
  }
  log_det_ = -2 * factor_.diagonal().array().log().sum();
  stage_ = Stage::condition;
}

// Power iteration for the largest eigenvalues of P and of P^-1, from where the last one ended.
void Polish::estimate_condition() {
  double largest[2] = {0, 0};
  for (int side = 0; side < 2; ++side) {
    Eigen::Block<Eigen::MatrixXd> v = directions_.block(0, side, dimension_, 1);
    for (int k = 0; k < 3; ++k) {
      if (side == 0) {
        spd::multiply_transposed(factor_, v);
        largest[side] = v.squaredNorm();
        spd::multiply(factor_, v);
      } else {
        spd::solve(factor_, v);
        largest[side] = v.squaredNorm();
        spd::solve_transposed(factor_, v);
      }
      const double norm = v.norm();
      if (!(norm > 0) || !std::isfinite(norm)) {
        v.setConstant(1 / std::sqrt(static_cast<double>(dimension_)));
        largest[side] = std::numeric_limits<double>::infinity();
        break;
      }
      v /= norm;
    }
  }
  condition_ = largest[0] * largest[1];
}

void Polish::samples(SampleRing& ring) {
  const Index wanted = std::min<Index>(columns_.cols(), static_cast<Index>(last_ - cursor_));
  const Index count = ring.contiguous(cursor_, wanted);
  const Eigen::Map<const Eigen::MatrixXd, 0, Eigen::OuterStride<>> x(
      ring.x(cursor_), dimension_, count, Eigen::OuterStride<>(ring.rows()));
  auto y = columns_.leftCols(count);
  y = x;
  spd::multiply_transposed(factor_, y);
  for (Index k = 0; k < count; ++k) {
    const std::int64_t position = cursor_ + k;
    const double omega = ring.omega(position);
    const double q = y.col(k).squaredNorm();
    // Leverages reach 1 only through rounding; the tracker rebuilds long before.
    const double h = std::min(omega * ring.weight(position, from_.current) * q, .999999);
    const double d1 = from_.total * q / (1 - h);
    const double u = leave_one_out_weight(d1, omega * d1 / from_.mass, from_.nu, from_.channels);
    ring.weight(position, 1 - from_.current) = u;
    total_ += omega * u;
    y.col(k) *= std::sqrt(omega * u);
  }
  spd::add_gram(1, y, 1, gram_);
  cursor_ += count;
}

void Polish::add_tail(const Eigen::MatrixXd& tail) {
  z_.triangularView<Eigen::Lower>() = tail.triangularView<Eigen::Lower>();
  spd::mirror_lower(z_);
  spd::multiply_transposed(factor_, z_);  // L' E
  formed_.noalias() = z_.transpose();     // E L
  spd::multiply_transposed(factor_, formed_);
  gram_.triangularView<Eigen::Lower>() += formed_;
  stage_ = Stage::judge;
}

void Polish::judge() {
  // In the coordinates of L' the lifted constant is the last component and everything else is
  // centred at the current m, so the leading p x p block speaks of the scatter and its last row of
  // the centre.
  const Index p = dimension_ - lift_;
  const double channels = static_cast<double>(p);
  const double nu = from_.nu + static_cast<double>(lift_);
  const double scale = from_.total / from_.mass;
  const double t = scale * gram_.diagonal().head(p).sum() / channels - 1;
  double square = 0;
  for (Index j = 0; j < p; ++j) {
    const double d = scale * gram_(j, j) - 1 - t;
    square += d * d + 2 * scale * scale * gram_.col(j).segment(j + 1, p - 1 - j).squaredNorm();
  }
  // Under unequal masses t also holds what the newest samples' own leverage has changed, which does
  // not feed back. The mean weight says the same without it: for equal masses
  // t = -nu (mean u - 1)/(p (1 - p/n)^2) to a few per cent (tests/bench, drift table).
  double feedback = t;
  if (from_.samples_effective > 1.1 * channels) {
    const double share = 1 - channels / from_.samples_effective;
    feedback = -nu * (total_ / from_.mass - 1) / (channels * share * share);
  }
  residual_ = std::sqrt(std::pow(shape_gain(nu, channels), 2) * square +
                        std::pow(scale_gain(nu, channels) * feedback, 2) * channels);
  centre_residual_ =
      lift_ == 0 ? 0 : shape_gain(nu, channels) * scale * gram_.row(p).head(p).norm();
  if (!std::isfinite(residual_) || !spd::cholesky(gram_)) {
    stage_ = Stage::failed;
    return;
  }
  log_det_ += 2 * gram_.diagonal().array().log().sum();
  z_.setZero();
  z_.triangularView<Eigen::Upper>() = factor_.transpose();
  block_ = 0;
  stage_ = Stage::solve;
}

void Polish::solve() {  // Z = C^-1 L', C the factor of G, some columns a step
  const double d = static_cast<double>(dimension_);
  const Index wide = std::max<Index>(16, static_cast<Index>(2 * kStepWork / (d * d)));
  const Index count = std::min(wide, dimension_ - block_);
  spd::solve(gram_, z_.middleCols(block_, count));
  block_ += count;
  if (block_ < dimension_) return;
  block_ = 0;
  stage_ = Stage::form;
}

void Polish::form() {  // P_new = Z'Z, some block columns of the lower triangle a step
  const double d = static_cast<double>(dimension_);
  const Index wide = std::max<Index>(16, static_cast<Index>(kStepWork / (d * d)));
  const Index count = std::min(wide, dimension_ - block_);
  const Index below = dimension_ - block_ - count;
  spd::add_inner_gram(1, z_.middleCols(block_, count), 0,
                      formed_.block(block_, block_, count, count));
  if (below > 0) {
    spd::add_transposed_product(1, z_.rightCols(below), z_.middleCols(block_, count), 0,
                                formed_.block(block_ + count, block_, below, count));
  }
  block_ += count;
  if (block_ < dimension_) return;
  next_.assign(formed_);
  mass_ = from_.mass;
  entered_ = last_;
  left_ = first_;
  stage_ = Stage::replay;
}

// Brings the new matrix up to the samples that entered and left since the snapshot.
void Polish::replay(SampleRing& ring) {
  const int fresh = 1 - from_.current;
  for (int k = 0; k < 2; ++k) {
    const bool enter = entered_ < ring.end();
    const bool leave = left_ < ring.begin() && left_ < entered_;
    if (!enter && !leave) break;
    if (leave) {
      const double* x = ring.x(left_);
      next_.multiply(x, y_.data());
      double q = 0;
      for (Index i = 0; i < dimension_; ++i) q += x[i] * y_[static_cast<std::size_t>(i)];
      const double a = ring.omega(left_) * ring.weight(left_, fresh);
      const double h = a * q;
      if (!(h < 1)) {
        stage_ = Stage::failed;
        return;
      }
      next_.add(a / (1 - h), y_.data());
      log_det_ += std::log1p(-h);
      total_ -= a;
      mass_ -= ring.omega(left_);
      ++left_;
    }
    if (enter) {
      const double* x = ring.x(entered_);
      next_.multiply(x, y_.data());
      double q = 0;
      for (Index i = 0; i < dimension_; ++i) q += x[i] * y_[static_cast<std::size_t>(i)];
      const double omega = ring.omega(entered_);
      // W and M as they will be with the sample in, at the present mean weight.
      const double scale = total_ / mass_;
      const double mass = mass_ + omega;
      const double d1 = q * scale * mass;
      const double u = leave_one_out_weight(d1, omega * d1 / mass, from_.nu, from_.channels);
      const double w = u * scale;
      ring.weight(entered_, fresh) = w;
      next_.add(-omega * w / (1 + omega * w * q), y_.data());
      log_det_ += std::log1p(omega * w * q);
      total_ += omega * w;
      mass_ = mass;
      ++entered_;
    }
  }
  if (entered_ == ring.end() && left_ == ring.begin()) stage_ = Stage::done;
}

}  // namespace tailweir

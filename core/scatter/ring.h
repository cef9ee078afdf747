// The samples a horizon remembers, oldest first, in one block of memory that is written in a
// circle.
//
// A slot keeps the sample as the tracker uses it (scaled, offset, lifted, padded), its mass omega,
// its time, its distance and two weights: the one it was added with and the one the polish under
// way has found. Departed samples stay readable until their slot is written again (`slack` slots
// more than are in use), which is what lets a polish run over many samples' time. Positions are
// absolute: the k-th sample ever appended is k. Grows (allocates) only when a time-based memory
// outgrows it. Thread rule: one owner.
#pragma once

#include <Eigen/Core>
#include <cassert>
#include <cstdint>
#include <vector>

#include "core/settings.h"

namespace tailweir {

// What a sample with missing entries left in A beside its outer product: f C C' on the missing
// entries (missing_sample.h). Empty for complete samples, which is nearly always.
struct PartialSample {
  std::vector<Index> missing;
  Eigen::MatrixXd factor;  // C, |m| x |m|
  double f = 0;
};

class SampleRing {
 public:
  SampleRing(Index rows, Index capacity, Index slack) : rows_(rows), slack_(slack) {
    resize(capacity + slack);
  }

  Index rows() const { return rows_; }
  std::int64_t begin() const { return begin_; }  // oldest in use
  std::int64_t end() const { return end_; }      // one past the newest
  Index size() const { return static_cast<Index>(end_ - begin_); }

  // Opens the next slot and returns its position. The sample's values are unspecified.
  std::int64_t append() {
    if (size() + 1 + slack_ > capacity_) grow();
    partial_[at(end_)].missing.clear();
    return end_++;
  }
  void drop_oldest() {
    assert(size() > 0);
    ++begin_;
  }
  void clear() { begin_ = end_; }

  double* x(std::int64_t position) { return x_.data() + slot(position) * rows_; }
  const double* x(std::int64_t position) const { return x_.data() + slot(position) * rows_; }
  double& omega(std::int64_t position) { return omega_[at(position)]; }
  double omega(std::int64_t position) const { return omega_[at(position)]; }
  // which: 0 or 1, the two weights.
  double& weight(std::int64_t position, int which) { return weight_[which][at(position)]; }
  double weight(std::int64_t position, int which) const { return weight_[which][at(position)]; }
  // Squared distance at the fit that last saw the sample.
  double& distance(std::int64_t position) { return distance_[at(position)]; }
  double distance(std::int64_t position) const { return distance_[at(position)]; }
  std::int64_t& time(std::int64_t position) { return time_[at(position)]; }
  std::int64_t time(std::int64_t position) const { return time_[at(position)]; }

  PartialSample& partial(std::int64_t position) { return partial_[at(position)]; }
  const PartialSample& partial(std::int64_t position) const { return partial_[at(position)]; }

  // How many samples from `position` on lie side by side in memory, at most `wanted`.
  Index contiguous(std::int64_t position, Index wanted) const {
    const Index left = capacity_ - slot(position);
    return wanted < left ? wanted : left;
  }

  template <typename Archive>
  void archive(Archive& a) {
    a(rows_, slack_, capacity_, begin_, end_, x_, omega_, weight_[0], weight_[1], distance_, time_);
  }

 private:
  Index slot(std::int64_t position) const { return static_cast<Index>(position & (capacity_ - 1)); }
  std::size_t at(std::int64_t position) const { return static_cast<std::size_t>(slot(position)); }

  void resize(Index capacity) {
    // A power of two, so that a position finds its slot without a division.
    capacity_ = 1;
    while (capacity_ < capacity) capacity_ *= 2;
    const std::size_t n = static_cast<std::size_t>(capacity_);
    x_.assign(n * static_cast<std::size_t>(rows_), 0.0);
    omega_.assign(n, 0.0);
    weight_[0].assign(n, 0.0);
    weight_[1].assign(n, 0.0);
    distance_.assign(n, 0.0);
    time_.assign(n, 0);
    partial_.assign(n, {});
  }

  // Doubles the room; samples keep their positions.
  void grow() {
    SampleRing bigger(rows_, 2 * capacity_ - slack_, slack_);
    const std::int64_t from = end_ > capacity_ ? end_ - capacity_ : 0;
    bigger.begin_ = begin_;
    bigger.end_ = end_;
    for (std::int64_t k = from; k < end_; ++k) {
      for (Index i = 0; i < rows_; ++i) bigger.x(k)[i] = x(k)[i];
      bigger.omega(k) = omega(k);
      bigger.weight(k, 0) = weight(k, 0);
      bigger.weight(k, 1) = weight(k, 1);
      bigger.distance(k) = distance(k);
      bigger.time(k) = time(k);
      bigger.partial(k) = partial(k);
    }
    *this = std::move(bigger);
  }

  Index rows_ = 0, slack_ = 0, capacity_ = 0;
  std::int64_t begin_ = 0, end_ = 0;
  std::vector<double> x_, omega_, weight_[2], distance_;
  std::vector<std::int64_t> time_;
  std::vector<PartialSample> partial_;
};

}  // namespace tailweir

// Drift gauge: how far the tracked scatter has moved from the exact fixed point since a polish.
//
// Old weights go stale as S moves. Every sample that leaves (or, for a half-life, a sample probed
// in the ring) tells how stale: e = ln(u(d) (W/M)/w), d from the current P. With r the rms of e
// since the last polish, the distance to the fixed point grows like c p r/sqrt(n) on top of what
// the polish left; c is learned from the distances that polishes measure. O(1) a sample. Thread
// rule: one owner.
#pragma once

#include <cstdint>

namespace tailweir {

class Gauge {
 public:
  Gauge() = default;
  // p channels, n effective samples of the memory, expected: distance expected after n samples,
  // safety: factor on the grown part, so that an estimate that errs does so on the safe side.
  Gauge(double p, double n, double expected, double safety);

  // e of one sample that left or was probed.
  void observe(double e) {
    square_ += e * e;
    ++count_;
  }

  // A polish measured `before` as the distance of a state `since` samples after the previous one,
  // and leaves `after`.
  void polished(double before, double after, std::int64_t since);

  // Estimated distance now, `since` samples after the last polish, n effective samples.
  double estimate(double n, std::int64_t since) const;

  double constant() const { return constant_; }

  template <typename Archive>
  void archive(Archive& a) {
    a(p_, n_, safety_, constant_, rate_, after_, square_, count_);
  }

 private:
  double rms_square(std::int64_t since) const;

  double p_ = 1, n_ = 1;
  double safety_ = 1;
  double constant_ = 1;  // c
  double rate_ = 0;      // mean e^2 after n samples
  double after_ = 0;     // distance the last polish left
  double square_ = 0;    // sum of e^2 since
  std::int64_t count_ = 0;
};

}  // namespace tailweir

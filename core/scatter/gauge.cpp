#include "core/scatter/gauge.h"

#include <algorithm>
#include <cmath>

namespace tailweir {
namespace {

// Observations that the learned growth counts for, so that the first few e do not decide alone.
constexpr double kPriorCount = 8;
// Share of a new observation in what is learned.
constexpr double kLearning = .3;
// The mean e^2 since a polish grows like (samples/n)^kGrowth (tests/bench, drift table).
constexpr double kGrowth = .75;

}  // namespace

Gauge::Gauge(double p, double n, double expected, double safety)
    // The constant falls from about 3 at p = 6 to 1 at p >= 100 (tests/bench, drift table).
    : p_(p), n_(n), safety_(safety), constant_(1 + 11 / p) {
  const double r = expected * std::sqrt(n) / (constant_ * p);
  rate_ = r * r;
}

double Gauge::rms_square(std::int64_t since) const {
  const double prior = rate_ * std::pow(static_cast<double>(since) / n_, kGrowth);
  return (square_ + kPriorCount * prior) / (static_cast<double>(count_) + kPriorCount);
}

double Gauge::estimate(double n, std::int64_t since) const {
  const double grown = safety_ * constant_ * p_ / std::sqrt(n) * std::sqrt(rms_square(since));
  return std::sqrt(after_ * after_ + grown * grown);
}

void Gauge::polished(double before, double after, std::int64_t since) {
  if (since > 0) {
    const double r = std::sqrt(rms_square(since));
    const double grown = std::sqrt(std::max(before * before - after_ * after_, 0.));
    if (r > 0 && grown > 0) {
      const double seen = grown * std::sqrt(n_) / (p_ * r);
      constant_ += kLearning * (std::clamp(seen, .2, 10.) - constant_);
    }
    if (count_ > 0) {
      const double seen = square_ / static_cast<double>(count_) /
                          std::pow(static_cast<double>(since) / n_, kGrowth);
      const double share = kLearning * std::min(1., static_cast<double>(count_) / kPriorCount);
      rate_ += share * (seen - rate_);
    }
  }
  after_ = after;
  square_ = 0;
  count_ = 0;
}

}  // namespace tailweir

// Keeps the far end of a p-value honest: what a model calls one in a thousand is corrected by how
// often its tenth or thirtieth really came, and how fast it thins out from there.
//
// For true uniform P the excess ln(u/P) over a level u is exponential with mean 1 and P < u has
// share u. Both are tracked with a long exponential memory, share f and mean excess s, and
//   P' = f (P/u)^(1/s) for P < u,   1 - (1 - f)(1 - P)/(1 - u) above:
// the estimator of Hill, Annals of Statistics 3, 1975, applied to p-values. Standard error of s is
// 1/sqrt(u memory). Thread rule: one owner; the state is the class's three numbers.
#pragma once

#include <algorithm>
#include <cmath>
#include <cstdint>

namespace tailweir::detect {

struct RecalibrationState {
  double share = 0, excess = 0;  // f and f s
  std::int64_t count = 0;
};

class Recalibration {
 public:
  // level u in (0, 1); memory in samples. Begins as if `prior` samples had agreed with the model.
  explicit Recalibration(double level, double memory = 10000, double prior = 500)
      : level_(level), memory_(memory), prior_(prior), state_{level, level, 0} {}

  double level() const { return level_; }
  // p in [0, 1].
  double apply(double p) const {
    if (p >= level_) return 1 - (1 - state_.share) * (1 - p) / (1 - level_);
    return state_.share * std::pow(p / level_, state_.share / state_.excess);
  }
  void push(double p) {
    const double rate = 1 / std::min(memory_, prior_ + static_cast<double>(++state_.count));
    const bool below = p < level_;
    state_.share += rate * ((below ? 1. : 0.) - state_.share);
    // Excess is held at what one in 1e12 has: an outlier is no tail.
    const double excess = below ? std::log(level_ / std::max(p, kLeast)) : 0;
    state_.excess += rate * (excess - state_.excess);
  }
  const RecalibrationState& state() const { return state_; }
  void restore(const RecalibrationState& state) { state_ = state; }

 private:
  static constexpr double kLeast = 1e-12;
  double level_, memory_, prior_;
  RecalibrationState state_;
};

}  // namespace tailweir::detect

// Has a confirmed tail change gone back? The reverse test.
//
// nu1 is fitted to the samples since the change (filter evidence on eight values of nu, parabola at
// the best), then moved one standard error towards the reference nu0: a base heavier (for a heavier
// alert) than the truth would recover falsely within tens of samples. Then
//   S = max(0, S) + min(1, l_nu0 - l_base),
// with the dynamics and the threshold of the opposite direction at the base. The fit is renewed as
// samples accumulate, only while S <= 0, so that a return does not pull the base after itself.
// Measured recovery and false recovery: core/detect/README.md. Thread rule: one owner; no
// allocation after construction.
#pragma once

#include <array>
#include <cstdint>

#include "core/detect/tail_bank.h"
#include "core/detect/tail_reference.h"

namespace tailweir::detect {

// Plain state, to be stored and restored as it is.
struct RecoveryState {
  double nu0 = 0;
  int candidate = -1;  // fit under way: next candidate; -1: none
  std::int64_t fit_end = 0, fitted_count = 0;
  std::array<double, 8> evidence{};
  double nu1 = 0;   // fitted; 0: not yet
  double base = 0;  // of the reverse test; 0: not yet
  double sum = 0, threshold = 0;
  std::array<FilterState, 2> filter;
};

class Recovery {
 public:
  Recovery(double channels, double mean_samples);

  // direction of the alert; since: all values since the change.
  void start(TailDirection direction, double nu0, const ValueRing& since);
  // Feeds y, already pushed to `since`. True when the change has gone back.
  bool update(double y, const ValueRing& since);
  double nu1() const { return state_.nu1; }
  double sum() const { return state_.sum; }

  const RecoveryState& state() const { return state_; }
  void restore(const RecoveryState& state, TailDirection direction);

 private:
  void fit_one(const ValueRing& since);
  void finish_fit(const ValueRing& since);
  double candidate_nu(int k) const;

  double channels_, mean_samples_;
  TailDirection direction_ = TailDirection::heavier;
  std::array<FilterStep, 2> step_;  // by direction
  EmissionTable trial_;
  std::array<EmissionTable, 2> table_;
  RecoveryState state_;
};

}  // namespace tailweir::detect

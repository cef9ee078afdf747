// One direction of the tail monitor: a base and three alternatives for nu, each with its own
// volatility filter, and the CUSUM of each alternative against the base.
//
//   S_j = max(0, S_j) + min(cap, l_j - l_0),  j = 1..3; the statistic is max_j S_j.
// Alternatives: heavier base x .7 .5 .3, lighter base x 1.5 2 4. The cap (1 nat, from above only)
// is what stops a single outlier from raising an alert. Published source: Page, Biometrika 41,
// 1954; the filtered likelihood and the cap are derived in core/detect/README.md.
//
// The two directions use different scale dynamics: heavier step .08, jump .002; lighter step .04,
// jump .001. Volatility that clusters (GARCH) looks like heavy tails to a filter that cannot follow
// it, and like light tails to one that follows too easily: chosen by the study in tests/bench.
// Cost: four filter steps, about .25 us; no allocation after construction. Thread rule: one owner.
#pragma once

#include <array>
#include <cstdint>

#include "core/detect/scale_filter.h"

namespace tailweir::detect {

enum class TailDirection { heavier = 0, lighter = 1 };

inline FilterSettings dynamics_of(TailDirection direction) {
  return direction == TailDirection::heavier ? FilterSettings{.08, .002, 1e-3}
                                             : FilterSettings{.04, .001, 1e-3};
}

struct BankSettings {
  std::array<double, 3> factor{.7, .5, .3};
  FilterSettings dynamics;
  double cap = 1;
};
BankSettings bank_of(TailDirection direction);

// Plain state, to be stored and restored as it is; the tables follow from base.
struct BankState {
  double base = 0;  // nu of the base; 0: not set
  std::array<FilterState, 4> filter;
  std::array<double, 3> sum{};          // S_j
  std::array<std::int64_t, 3> begin{};  // first sample after the last S_j <= 0
};

class TailBank {
 public:
  TailBank(double channels, const BankSettings& settings);

  // Sets the base now: four tables, about 200 us.
  void set_base(double nu);
  // The same in four calls, one table each (k = 0..3); update() only once all four are done.
  void set_base_part(int k, double nu);
  double base() const { return state_.base; }
  double nu_of(int j) const;  // j = 0: base, 1..3: alternatives

  // Feeds sample number t with y = ln D. accumulate = false keeps the filters going and S at 0.
  void update(double y, std::int64_t t, bool accumulate = true);
  const std::array<double, 4>& evidence() const {
    return evidence_;
  }  // l_0..l_3 of the last update
  // Largest S_j, its j (1..3) and the sample its climb began with.
  double statistic() const { return state_.sum[leader_]; }
  int leader() const { return static_cast<int>(leader_) + 1; }
  std::int64_t begin() const { return state_.begin[leader_]; }
  void reset_sums();
  void restart();  // sums at 0, filters uniform
  // Posterior mean log-scale of the base's filter: a volatility level free of the tail.
  double log_scale() const { return state_.filter[0].mean_log_scale(); }

  const BankState& state() const { return state_; }
  void restore(const BankState& state);

 private:
  double channels_;
  BankSettings settings_;
  FilterStep step_;
  std::array<EmissionTable, 4> table_;
  std::array<double, 4> evidence_{};
  std::size_t leader_ = 0;
  BankState state_;
};

}  // namespace tailweir::detect

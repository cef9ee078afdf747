// The running fit: which scaled F the last predictive distances really follow, so that flags keep
// their rate whatever the scatter's and nu's own errors are; and the rank beside it.
//
// y = ln D of the last M samples is fitted by maximum likelihood with two parameters, lf(y - a; p,
// nu), and P(D >= d) = SF_F(d e^-a / p; p, nu). Beside it the distribution-free p-value
// (1 + #{past >= d})/(K + 1) over the last K. Published source: Fisher scoring (Fisher, Proc.
// Cambridge Phil. Soc. 22, 1925) with the information of Lange, Little & Taylor, J. Amer. Statist.
// Assoc. 84, 1989.
//
// Cost: a pass over the memory is spread over the samples, `slice` values a sample; at the end of a
// pass one scoring step is taken. No spikes but one: the first fit, when the memory first holds
// `minimum` values. No allocation after construction. Thread rule: one owner.
#pragma once

#include <cstdint>
#include <vector>

#include "core/detect/cached_tail.h"

namespace tailweir::detect {

struct RunningFitSettings {
  int minimum = 1000;      // values before the first fit
  int memory = 4000;       // values remembered at most, >= minimum
  int rank_memory = 1000;  // values the rank looks back over, <= memory
  int slice = 4;           // values visited a sample
  double nu_floor = .3, nu_ceiling = 1000;
};

// Plain state, to be stored and restored as it is.
struct RunningFitState {
  std::vector<double> ring;  // the last ln D, `memory` of them
  std::int64_t pushed = 0;   // values ever pushed
  double log_scale = 0;      // a
  double nu = 0;             // 0: not yet fitted
  // The pass under way: values it goes over, values visited, sums of ln(1 + e^t) and e^t/(1 + e^t).
  std::int64_t pass_begin = 0, pass_end = 0, pass_at = 0;
  double sum_log = 0, sum_share = 0;
};

class RunningFit {
 public:
  explicit RunningFit(double channels, const RunningFitSettings& settings = {});

  // Remembers the predictive distance of one sample (after it was scored). Distances that are zero
  // or not finite are ignored.
  void push(double distance);

  bool ready() const { return state_.nu > 0; }
  double log_scale() const { return state_.log_scale; }
  double nu() const { return state_.nu; }
  std::int64_t held() const;

  // P(D >= distance) under the fit, remembered and interpolated (cached_tail.h). Precondition:
  // ready().
  double p_value(double distance);
  // Precondition: none; 1 while nothing is remembered. Costs a scan of `rank_memory` values.
  double rank_p_value(double distance) const;

  const RunningFitState& state() const { return state_; }
  void restore(const RunningFitState& state);

 private:
  double& slot(std::int64_t number);
  double slot(std::int64_t number) const;
  void begin_pass();
  void visit(std::int64_t count);
  void step();
  void fit_whole();

  double channels_;
  RunningFitSettings settings_;
  RunningFitState state_;
  CachedTail cache_;
};

}  // namespace tailweir::detect

#include "core/detect/recovery.h"

#include <algorithm>
#include <cmath>

#include "core/detect/thresholds.h"

namespace tailweir::detect {

namespace {
constexpr double kLogSpread = .25;  // between candidates, ln nu
constexpr double kGuard = 1;        // standard errors towards the reference
constexpr double kNearest = .9;     // the base stays this factor away from nu0
constexpr double kRenew = 1.5;      // growth of the sample count that renews the fit
constexpr std::int64_t kUncounted = 10;
constexpr double kCap = 1;
}  // namespace

Recovery::Recovery(double channels, double mean_samples)
    : channels_(channels),
      mean_samples_(mean_samples),
      step_{FilterStep(dynamics_of(TailDirection::heavier)),
            FilterStep(dynamics_of(TailDirection::lighter))} {
  trial_.reserve();
  for (EmissionTable& table : table_) table.reserve();
}

double Recovery::candidate_nu(int k) const {
  const double sign = direction_ == TailDirection::heavier ? -1 : 1;
  return state_.nu0 * std::exp(sign * kLogSpread * (k + 1));
}

void Recovery::start(TailDirection direction, double nu0, const ValueRing& since) {
  direction_ = direction;
  state_ = RecoveryState();
  state_.nu0 = nu0;
  state_.candidate = 0;
  state_.fit_end = since.pushed;
}

// One candidate a sample: its table and a run over what has come since the change.
void Recovery::fit_one(const ValueRing& since) {
  trial_.build(channels_, candidate_nu(state_.candidate));
  const FilterStep& step = step_[static_cast<std::size_t>(direction_)];
  FilterState filter;
  double sum = 0;
  for (std::int64_t i = since.oldest; i < state_.fit_end; ++i) {
    const double l = step(trial_, since.at(i), filter);
    if (i - since.oldest >= kUncounted) sum += l;
  }
  state_.evidence[static_cast<std::size_t>(state_.candidate)] = sum;
  if (++state_.candidate == static_cast<int>(state_.evidence.size())) finish_fit(since);
}

void Recovery::finish_fit(const ValueRing& since) {
  state_.candidate = -1;
  state_.fitted_count = std::max<std::int64_t>(1, state_.fit_end - since.oldest);
  const std::array<double, 8>& e = state_.evidence;
  const std::size_t best =
      static_cast<std::size_t>(std::max_element(e.begin(), e.end()) - e.begin());
  double offset = 0;
  if (best > 0 && best + 1 < e.size()) {
    const double bend = e[best - 1] - 2 * e[best] + e[best + 1];
    if (bend < 0) offset = .5 * (e[best - 1] - e[best + 1]) / bend;
  }
  const double sign = direction_ == TailDirection::heavier ? -1 : 1;
  state_.nu1 = candidate_nu(static_cast<int>(best)) * std::exp(sign * kLogSpread * offset);
  const double error =
      guard_standard_error(channels_, state_.nu1, static_cast<double>(state_.fitted_count));
  const double guarded = state_.nu1 * std::exp(-sign * kGuard * error);
  state_.base = direction_ == TailDirection::heavier ? std::min(guarded, state_.nu0 * kNearest)
                                                     : std::max(guarded, state_.nu0 / kNearest);
  table_[0].build(channels_, state_.base);
  table_[1].build(channels_, state_.nu0);
  const TailDirection opposite =
      direction_ == TailDirection::heavier ? TailDirection::lighter : TailDirection::heavier;
  state_.threshold = tail_threshold(channels_, state_.base, opposite, mean_samples_);
  state_.sum = 0;
  for (FilterState& filter : state_.filter) filter.reset();
  const FilterStep& step = step_[static_cast<std::size_t>(opposite)];
  for (std::int64_t i = since.oldest; i < since.pushed; ++i) {
    for (std::size_t k = 0; k < 2; ++k) step(table_[k], since.at(i), state_.filter[k]);
  }
}

bool Recovery::update(double y, const ValueRing& since) {
  if (state_.candidate >= 0) {
    fit_one(since);
    return false;
  }
  const FilterStep& step =
      step_[direction_ == TailDirection::heavier ? std::size_t{1} : std::size_t{0}];
  const double base = step(table_[0], y, state_.filter[0]);
  const double back = step(table_[1], y, state_.filter[1]);
  state_.sum = std::max(0., state_.sum) + std::min(kCap, back - base);
  if (state_.sum > state_.threshold) return true;
  const double count = static_cast<double>(since.held());
  if (state_.sum <= 0 && count >= kRenew * static_cast<double>(state_.fitted_count)) {
    state_.candidate = 0;
    state_.fit_end = since.pushed;
  }
  return false;
}

void Recovery::restore(const RecoveryState& state, TailDirection direction) {
  direction_ = direction;
  state_ = state;
  if (state_.base > 0) {
    table_[0].build(channels_, state_.base);
    table_[1].build(channels_, state_.nu0);
  }
}

}  // namespace tailweir::detect

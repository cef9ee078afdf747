#include "core/detect/tail_monitor.h"

#include <algorithm>
#include <cmath>

#include "core/detect/thresholds.h"

namespace tailweir::detect {

namespace {
constexpr int kLearningSlice = 10;     // stored values a fit visits a sample, while learning
constexpr int kArmedSlice = 1;         // and when armed
constexpr int kLearningPasses = 4;     // Newton steps of the first fit
constexpr int kWarm = 50;              // samples the filters run before the sums do
constexpr double kSameBase = .01;      // ln nu: a base this near is kept
constexpr double kCalibrated = .1;     // ln nu over which a simulated threshold holds
constexpr std::int64_t kSpare = 1500;  // values a raise may take back out of the reference
}  // namespace

TailMonitor::TailMonitor(const TailSettings& settings)
    : settings_(settings),
      bank_{TailBank(settings.channels, bank_of(TailDirection::heavier)),
            TailBank(settings.channels, bank_of(TailDirection::lighter))},
      fit_{NuFit(settings.channels, dynamics_of(TailDirection::heavier)),
           NuFit(settings.channels, dynamics_of(TailDirection::lighter))},
      recovery_(settings.channels,
                std::min(settings.mean_samples_heavier, settings.mean_samples_lighter)) {
  state_.reference = ValueRing(settings.reference_memory + kSpare);
  state_.since = ValueRing(kSpare + settings.longest_raise);
  if (settings.known_nu > 0) {
    plan_banks();
    while (state_.build_part >= 0) build_banks();
    state_.stage = AlertStage::armed;
  }
}

double TailMonitor::mean_samples(std::size_t d) const {
  return d == 0 ? settings_.mean_samples_heavier : settings_.mean_samples_lighter;
}

double TailMonitor::reference_nu(TailDirection direction) const {
  return settings_.known_nu > 0 ? settings_.known_nu : fit_[at(direction)].nu();
}

void TailMonitor::begin_fits() {
  const std::int64_t end = state_.reference.pushed;
  const std::int64_t begin = std::max(state_.reference.oldest, end - settings_.reference_memory);
  for (NuFit& fit : fit_) fit.begin(fit.nu() > 0 ? fit.nu() : state_.start_nu, begin, end);
}

bool TailMonitor::fits_done(int slice) {
  const bool first = fit_[0].visit(state_.reference, slice);
  const bool second = fit_[1].visit(state_.reference, slice);
  return first && second;
}

// The guarded bases; the tables follow one a sample.
void TailMonitor::plan_banks() {
  const double held =
      static_cast<double>(std::min(state_.reference.held(), settings_.reference_memory));
  bool moved = false;
  for (std::size_t d = 0; d < 2; ++d) {
    const double nu = std::min(reference_nu(static_cast<TailDirection>(d)), kLightestBase);
    const double error =
        settings_.known_nu > 0 ? 0 : guard_standard_error(settings_.channels, nu, held);
    state_.next_base[d] = nu * std::exp((d == 0 ? -1 : 1) * settings_.guard * error);
    const double base = bank_[d].base();
    moved = moved || !(base > 0) || std::abs(std::log(state_.next_base[d] / base)) > kSameBase;
  }
  if (moved) state_.build_part = 0;
}

void TailMonitor::build_banks() {
  const std::size_t d = static_cast<std::size_t>(state_.build_part / 4);
  bank_[d].set_base_part(state_.build_part % 4, state_.next_base[d]);
  if (state_.build_part % 4 == 3) find_threshold(d);
  state_.build_part = state_.build_part == 7 ? -1 : state_.build_part + 1;
}

void TailMonitor::find_threshold(std::size_t d) {
  const double base = state_.next_base[d];
  double h =
      tail_threshold(settings_.channels, base, static_cast<TailDirection>(d), mean_samples(d));
  const double made_for = state_.calibrated_nu[d];
  if (made_for > 0 && std::abs(std::log(base / made_for)) <= kCalibrated) h += state_.excess[d];
  state_.threshold[d] = h;
}

void TailMonitor::set_threshold(TailDirection direction, double nu, double threshold) {
  const std::size_t d = at(direction);
  state_.calibrated_nu[d] = nu;
  state_.excess[d] = threshold - tail_threshold(settings_.channels, nu, direction, mean_samples(d));
  if (bank_[d].base() > 0) {
    state_.next_base[d] = bank_[d].base();
    find_threshold(d);
  }
}

void TailMonitor::learn(double y) {
  state_.reference.push(y);
  if (state_.build_part >= 0) {
    build_banks();
    if (state_.build_part < 0) {
      state_.stage = AlertStage::armed;
      state_.warm = kWarm;
      begin_fits();
    }
    return;
  }
  if (fit_[0].running()) {
    if (!fits_done(kLearningSlice)) return;
    if (fit_[0].passes() >= kLearningPasses) {
      plan_banks();
      state_.build_part = 0;
      return;
    }
    begin_fits();
    return;
  }
  // After a re-reference the samples since the change are enough to begin with.
  const bool again = state_.alert.stage == AlertStage::re_referenced;
  const std::int64_t enough =
      again ? std::min(settings_.reference_minimum, settings_.re_reference_after - 10)
            : settings_.reference_minimum;
  if (state_.reference.held() >= enough) begin_fits();
}

bool TailMonitor::push(double y, bool hold) {
  if (!std::isfinite(y)) return false;
  ++state_.t;
  if (state_.stage == AlertStage::learning) {
    if (!hold) learn(y);
    return false;
  }
  if (state_.stage == AlertStage::armed) return watch(y, hold);
  state_.since.push(y);
  for (TailBank& bank : bank_) bank.update(y, state_.t, false);
  return state_.stage == AlertStage::raised ? follow_raised() : follow_confirmed(y);
}

bool TailMonitor::watch(double y, bool hold) {
  if (!hold) state_.reference.push(y);
  if (!hold && settings_.known_nu <= 0) {
    if (state_.build_part >= 0) {
      build_banks();
      return false;
    }
    if (fits_done(kArmedSlice)) {
      plan_banks();
      begin_fits();
      if (state_.build_part >= 0) return false;
    }
  }
  const bool accumulate = !hold && state_.warm == 0;
  if (state_.warm > 0) --state_.warm;
  for (TailBank& bank : bank_) bank.update(y, state_.t, accumulate);
  if (!accumulate) return false;
  const double excess_heavier = bank_[0].statistic() - state_.threshold[0];
  const double excess_lighter = bank_[1].statistic() - state_.threshold[1];
  if (!(std::max(excess_heavier, excess_lighter) > 0)) return false;
  raise(excess_heavier >= excess_lighter ? 0 : 1);
  return true;
}

void TailMonitor::raise(std::size_t d) {
  const TailBank& bank = bank_[d];
  Alert& alert = state_.alert;
  const std::int64_t id = alert.id + 1;
  alert = Alert();
  alert.id = id;
  alert.kind = AlertKind::tail;
  alert.direction = d == 0 ? AlertDirection::heavier : AlertDirection::lighter;
  alert.stage = state_.stage = AlertStage::raised;
  alert.since = bank.begin();
  alert.raised_at = alert.changed_at = state_.t;
  alert.statistic = bank.statistic();
  alert.threshold = state_.threshold[d];
  alert.from = std::min(reference_nu(static_cast<TailDirection>(d)), kLightestBase);
  alert.to = bank.nu_of(bank.leader());
  state_.alternative = bank.leader();
  // What came since the change is not quiet data: out of the reference, into its own memory.
  state_.since.clear();
  const std::int64_t count =
      std::min({state_.t - alert.since + 1, kSpare, state_.reference.held()});
  for (std::int64_t i = state_.reference.pushed - count; i < state_.reference.pushed; ++i) {
    state_.since.push(state_.reference.at(i));
  }
  state_.reference.forget_newest(count);
}

bool TailMonitor::follow_raised() {
  Alert& alert = state_.alert;
  const std::array<double, 4>& l =
      bank_[alert.direction == AlertDirection::heavier ? 0 : 1].evidence();
  alert.wald += std::min(kWaldCap, l[static_cast<std::size_t>(state_.alternative)] - l[0]);
  if (alert.wald >= kWaldBound) {
    alert.stage = state_.stage = AlertStage::confirmed;
    alert.changed_at = state_.t;
    recovery_.start(alert.direction == AlertDirection::heavier ? TailDirection::heavier
                                                               : TailDirection::lighter,
                    alert.from, state_.since);
    return true;
  }
  if (alert.wald > -kWaldBound && state_.t - alert.raised_at < settings_.longest_raise) {
    return false;
  }
  for (std::int64_t i = state_.since.oldest; i < state_.since.pushed; ++i) {
    state_.reference.push(state_.since.at(i));
  }
  close(AlertStage::dismissed);
  return true;
}

bool TailMonitor::follow_confirmed(double y) {
  const bool back = recovery_.update(y, state_.since);
  if (recovery_.nu1() > 0) state_.alert.to = recovery_.nu1();
  if (back) {
    close(AlertStage::recovered);
    return true;
  }
  if (state_.t - state_.alert.since < settings_.re_reference_after) return false;
  re_reference();
  return true;
}

void TailMonitor::close(AlertStage stage) {
  state_.alert.stage = stage;
  state_.alert.changed_at = state_.t;
  state_.stage = AlertStage::armed;
  state_.since.clear();
  for (TailBank& bank : bank_) bank.reset_sums();
}

void TailMonitor::re_reference() {
  const std::int64_t begin = state_.since.oldest, end = state_.since.pushed;
  close(AlertStage::re_referenced);
  if (settings_.known_nu > 0) return;  // a known reference is not learned again
  state_.reference.clear();
  for (std::int64_t i = begin; i < end; ++i) state_.reference.push(state_.since.at(i));
  for (NuFit& fit : fit_) fit.forget();
  state_.start_nu = state_.alert.to;
  state_.stage = AlertStage::learning;
}

bool TailMonitor::explain() {
  if (!state_.alert.open()) return false;
  state_.alert.explained = true;
  close(AlertStage::dismissed);
  return true;
}

TailState TailMonitor::state() const {
  TailState state = state_;
  for (std::size_t d = 0; d < 2; ++d) {
    state.fit[d] = fit_[d].state();
    state.bank[d] = bank_[d].state();
  }
  state.recovery = recovery_.state();
  return state;
}

void TailMonitor::restore(const TailState& state) {
  state_ = state;
  for (std::size_t d = 0; d < 2; ++d) {
    fit_[d].restore(state.fit[d]);
    bank_[d].restore(state.bank[d]);
  }
  recovery_.restore(state.recovery, state.alert.direction == AlertDirection::lighter
                                        ? TailDirection::lighter
                                        : TailDirection::heavier);
}

}  // namespace tailweir::detect

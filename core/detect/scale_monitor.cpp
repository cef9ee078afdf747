#include "core/detect/scale_monitor.h"

#include <algorithm>
#include <cmath>

#include "core/detect/thresholds.h"
#include "core/student/student.h"

namespace tailweir::detect {

namespace {
constexpr double kMoved = .02;  // ln nu: thresholds are looked up again

double log_one_plus_exp(double t) {
  return t > 0 ? t + std::log1p(std::exp(-t)) : std::log1p(std::exp(t));
}
}  // namespace

void ScaleMonitor::adopt(double nu, double log_scale) {
  state_.nu = nu;
  state_.centre = log_scale;
  if (state_.threshold_nu > 0 && std::abs(std::log(nu / state_.threshold_nu)) < kMoved) return;
  state_.threshold_nu = nu;
  state_.threshold = {scale_threshold(settings_.channels, nu, true, settings_.mean_samples_up),
                      scale_threshold(settings_.channels, nu, false, settings_.mean_samples_down)};
}

bool ScaleMonitor::push(double y, double nu, double log_scale, bool hold) {
  if (!std::isfinite(y)) return false;
  ++state_.t;
  const bool open = state_.alert.open();
  if (!open) adopt(nu, log_scale);
  const double p = settings_.channels;
  const double t = y - state_.centre - state_.offset - std::log(state_.nu);
  const double at = log_one_plus_exp(t), half = .5 * (p + state_.nu);
  const std::array<double, 2> z = {
      -.5 * p * kScaleShift + half * (at - log_one_plus_exp(t - kScaleShift)),
      .5 * p * kScaleShift + half * (at - log_one_plus_exp(t + kScaleShift))};
  if (open) return follow(y, z);
  if (hold) {
    state_.sum.fill(0);
    return false;
  }
  for (std::size_t d = 0; d < 2; ++d) {
    if (!(state_.sum[d] > 0)) {
      state_.sum[d] = 0;
      state_.begin[d] = state_.t;
    }
    state_.sum[d] += z[d];
  }
  const std::size_t d =
      state_.sum[0] - state_.threshold[0] >= state_.sum[1] - state_.threshold[1] ? 0 : 1;
  if (!(state_.sum[d] > state_.threshold[d])) return false;
  Alert& alert = state_.alert;
  const std::int64_t id = alert.id + 1;
  alert = Alert();
  alert.id = id;
  alert.kind = AlertKind::scale;
  alert.direction = d == 0 ? AlertDirection::up : AlertDirection::down;
  alert.stage = state_.stage = AlertStage::raised;
  alert.since = state_.begin[d];
  alert.raised_at = alert.changed_at = state_.t;
  alert.statistic = state_.sum[d];
  alert.threshold = state_.threshold[d];
  alert.from = 1;
  alert.to = d == 0 ? 1.5 : 1 / 1.5;
  state_.reverse = state_.since_sum = 0;
  state_.since_count = 0;
  return true;
}

bool ScaleMonitor::follow(double y, const std::array<double, 2>& z) {
  Alert& alert = state_.alert;
  const std::size_t d = alert.direction == AlertDirection::up ? 0 : 1;
  // Volatility since, against what quiet samples average: E y = psi(p/2) - psi(nu/2) + ln nu.
  state_.since_sum += y;
  ++state_.since_count;
  const double quiet = state_.centre + state_.offset + student::digamma(.5 * settings_.channels) -
                       student::digamma(.5 * state_.nu) + std::log(state_.nu);
  const double moved = state_.since_sum / static_cast<double>(state_.since_count) - quiet;
  if (alert.stage == AlertStage::raised) {
    alert.wald += std::min(kWaldCap, z[d]);
    if (alert.wald >= kWaldBound) {
      alert.stage = state_.stage = AlertStage::confirmed;
      alert.changed_at = state_.t;
      alert.to = std::exp(.5 * moved);
      return true;
    }
    if (alert.wald > -kWaldBound && state_.t - alert.raised_at < settings_.longest_raise) {
      return false;
    }
    close(AlertStage::dismissed);
    return true;
  }
  state_.reverse = std::max(0., state_.reverse) - z[d];
  if (state_.reverse > state_.threshold[1 - d]) {
    close(AlertStage::recovered);
    return true;
  }
  if (state_.t - alert.since < settings_.re_reference_after) return false;
  state_.offset += moved;
  close(AlertStage::re_referenced);
  return true;
}

void ScaleMonitor::close(AlertStage stage) {
  state_.alert.stage = stage;
  state_.alert.changed_at = state_.t;
  state_.stage = AlertStage::armed;
  state_.sum.fill(0);
}

bool ScaleMonitor::explain() {
  if (!state_.alert.open()) return false;
  state_.alert.explained = true;
  close(AlertStage::dismissed);
  return true;
}

void ScaleMonitor::retest() {
  const std::int64_t id = state_.alert.id - 1;
  close(AlertStage::dismissed);
  state_.alert.id = id;
}

}  // namespace tailweir::detect

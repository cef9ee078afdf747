#include "core/detect/running_fit.h"

#include <Eigen/Core>
#include <algorithm>
#include <cassert>
#include <cmath>

#include "core/student/student.h"

namespace tailweir::detect {

namespace {
constexpr double kLargestStep = .7;  // of ln nu and of a in one scoring step
constexpr int kFirstSteps = 25;
}  // namespace

RunningFit::RunningFit(double channels, const RunningFitSettings& settings)
    : channels_(channels), settings_(settings) {
  assert(channels > 0 && settings.minimum >= 2 && settings.memory >= settings.minimum);
  assert(settings.rank_memory <= settings.memory && settings.slice >= 1);
  state_.ring.assign(static_cast<std::size_t>(settings.memory), 0);
}

double& RunningFit::slot(std::int64_t number) {
  return state_.ring[static_cast<std::size_t>(number % settings_.memory)];
}
double RunningFit::slot(std::int64_t number) const {
  return state_.ring[static_cast<std::size_t>(number % settings_.memory)];
}

std::int64_t RunningFit::held() const {
  return std::min<std::int64_t>(state_.pushed, settings_.memory);
}

void RunningFit::restore(const RunningFitState& state) {
  assert(state.ring.size() == state_.ring.size());
  state_ = state;
  cache_.forget(state_.log_scale + std::log(channels_));
}

void RunningFit::push(double distance) {
  if (!(distance > 0) || !std::isfinite(distance)) return;
  slot(state_.pushed) = std::log(distance);
  ++state_.pushed;
  if (!ready()) {
    if (state_.pushed >= settings_.minimum) fit_whole();
    return;
  }
  visit(settings_.slice);
  if (state_.pass_at == state_.pass_end) {
    step();
    begin_pass();
  }
}

void RunningFit::begin_pass() {
  state_.pass_end = state_.pushed;
  state_.pass_begin = state_.pass_at = state_.pushed - held();
  state_.sum_log = state_.sum_share = 0;
}

// Values that were overwritten since the pass began are read as what replaced them: a value is a
// value of the recent past either way, and the pass keeps its number of terms.
void RunningFit::visit(std::int64_t count) {
  const double shift = state_.log_scale + std::log(state_.nu);
  for (; count > 0 && state_.pass_at < state_.pass_end; --count, ++state_.pass_at) {
    const double t = slot(state_.pass_at) - shift;
    const double e = std::exp(-std::abs(t));
    const double log_one_plus = std::log1p(e);
    state_.sum_log += t > 0 ? t + log_one_plus : log_one_plus;
    state_.sum_share += t > 0 ? 1 / (1 + e) : e / (1 + e);
  }
}

// One Fisher scoring step in (a, ln nu). With t = y - a - ln nu:
//   lf = C(nu) + (p/2) t - ((p + nu)/2) ln(1 + e^t),  C' = (psi((p + nu)/2) - psi(nu/2))/2.
void RunningFit::step() {
  const double p = channels_, nu = state_.nu;
  const double n = static_cast<double>(state_.pass_end - state_.pass_begin);
  const double slope = .5 * p - .5 * (p + nu) * state_.sum_share / n;  // mean dlf/dt
  const double score_a = -slope;
  const double score_log_nu =
      .5 * nu * (student::digamma_ratio(p, nu) - state_.sum_log / n) - slope;
  const double info_a = p * nu / (2 * (p + nu + 2));
  const double info_cross = -p * nu / ((nu + p) * (nu + p + 2));
  const double info_nu = nu * nu * student::information_nu_scale_profiled(p, nu);
  const double step_nu = (score_log_nu - info_cross / info_a * score_a) / info_nu;
  const double log_nu = std::log(nu) + std::clamp(step_nu, -kLargestStep, kLargestStep);
  const double new_nu = std::clamp(std::exp(log_nu), settings_.nu_floor, settings_.nu_ceiling);
  const double step_a = (score_a - info_cross * std::log(new_nu / nu)) / info_a;
  state_.log_scale += std::clamp(step_a, -kLargestStep, kLargestStep);
  state_.nu = new_nu;
  cache_.forget(state_.log_scale + std::log(channels_));
}

void RunningFit::fit_whole() {
  state_.nu = 8;
  double sum = 0;
  for (std::int64_t i = state_.pushed - held(); i < state_.pushed; ++i) sum += slot(i);
  state_.log_scale = sum / static_cast<double>(held()) - std::log(channels_);
  for (int i = 0; i < kFirstSteps; ++i) {
    begin_pass();
    visit(held());
    step();
  }
  begin_pass();
}

double RunningFit::p_value(double distance) {
  assert(ready());
  return cache_.value(distance, [this](double d) {
    return student::tail_probability(d * std::exp(-state_.log_scale), channels_, state_.nu);
  });
}

double RunningFit::rank_p_value(double distance) const {
  const std::int64_t count = std::min<std::int64_t>(held(), settings_.rank_memory);
  if (!(distance > 0) || count == 0) return 1;
  const double y = std::log(distance);
  // The last `count` values are at most two runs of the ring.
  const std::int64_t end = (state_.pushed - 1) % settings_.memory + 1;
  const std::int64_t first_run = std::min(count, end);
  using Run = Eigen::Map<const Eigen::ArrayXd>;
  Eigen::Index above = (Run(state_.ring.data() + (end - first_run), first_run) >= y).count();
  const std::int64_t rest = count - first_run;
  above += (Run(state_.ring.data() + (settings_.memory - rest), rest) >= y).count();
  return static_cast<double>(1 + above) / static_cast<double>(count + 1);
}

}  // namespace tailweir::detect

#include "core/detect/tail_reference.h"

#include <algorithm>
#include <cassert>
#include <cmath>

#include "core/student/student.h"

namespace tailweir::detect {

namespace {
constexpr double kSpread = .2;           // ln of the factor between the three values of nu
constexpr double kLargestStep = .6;      // of ln nu in one pass
constexpr std::int64_t kUncounted = 30;  // first values of a pass: the filters find the scale
constexpr double kSmallestNu = .5, kLargestNu = 200;
constexpr double kLargestError = .5;
}  // namespace

void ValueRing::push(double y) {
  value[static_cast<std::size_t>(pushed % capacity())] = y;
  ++pushed;
  oldest = std::max(oldest, pushed - capacity());
}

void ValueRing::forget_newest(std::int64_t count) { pushed -= std::min(count, held()); }

double guard_standard_error(double channels, double nu, double samples) {
  const double information = student::information_nu_scale_profiled(channels, nu);
  return std::min(kLargestError, 1 / (nu * std::sqrt(samples * information)));
}

NuFit::NuFit(double channels, const FilterSettings& dynamics)
    : channels_(channels), dynamics_(dynamics), step_(dynamics) {
  for (EmissionTable& table : table_) table.reserve();
}

void NuFit::build_next() {
  table_[static_cast<std::size_t>(state_.built)].build(
      channels_, state_.nu * std::exp(kSpread * (state_.built - 1)), dynamics_.floor_share);
  ++state_.built;
}

void NuFit::begin(double nu, std::int64_t begin, std::int64_t end) {
  assert(nu > 0 && end > begin);
  state_.nu = std::clamp(nu, kSmallestNu, kLargestNu);
  state_.built = 0;
  state_.running = true;
  state_.begin = state_.at = begin;
  state_.end = end;
  state_.sum.fill(0);
  for (FilterState& filter : state_.filter) filter.reset();
}

bool NuFit::visit(const ValueRing& ring, int count) {
  if (!state_.running) return false;
  if (state_.built < 3) {
    build_next();
    return false;
  }
  state_.at = std::max(state_.at, ring.oldest);
  const std::int64_t end = std::min(state_.end, ring.pushed);
  for (; count > 0 && state_.at < end; --count, ++state_.at) {
    for (std::size_t k = 0; k < 3; ++k) {
      const double l = step_(table_[k], ring.at(state_.at), state_.filter[k]);
      if (state_.at - state_.begin >= kUncounted) state_.sum[k] += l;
    }
  }
  if (state_.at < end) return false;
  step();
  return true;
}

void NuFit::step() {
  const double n = static_cast<double>(std::max<std::int64_t>(1, state_.at - state_.begin));
  const double slope = (state_.sum[2] - state_.sum[0]) / (2 * kSpread);
  const double bend = -(state_.sum[2] - 2 * state_.sum[1] + state_.sum[0]) / (kSpread * kSpread);
  const double nu = state_.nu;
  const double expected = n * nu * nu * student::information_nu_scale_profiled(channels_, nu);
  const double step = slope / std::max(bend, .3 * expected);
  state_.nu = std::clamp(nu * std::exp(std::clamp(step, -kLargestStep, kLargestStep)), kSmallestNu,
                         kLargestNu);
  state_.running = false;
  ++state_.passes;
}

void NuFit::restore(const NuFitState& state) {
  state_ = state;
  if (!state_.running) return;
  const int built = state_.built;
  for (state_.built = 0; state_.built < built;) build_next();
}

}  // namespace tailweir::detect

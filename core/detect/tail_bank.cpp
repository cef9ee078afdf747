#include "core/detect/tail_bank.h"

#include <algorithm>
#include <cassert>

namespace tailweir::detect {

BankSettings bank_of(TailDirection direction) {
  BankSettings settings;
  if (direction == TailDirection::lighter) settings.factor = {1.5, 2, 4};
  settings.dynamics = dynamics_of(direction);
  return settings;
}

TailBank::TailBank(double channels, const BankSettings& settings)
    : channels_(channels), settings_(settings), step_(settings.dynamics) {
  for (EmissionTable& table : table_) table.reserve();
}

double TailBank::nu_of(int j) const {
  return j == 0 ? state_.base : state_.base * settings_.factor[static_cast<std::size_t>(j - 1)];
}

void TailBank::set_base(double nu) {
  for (int k = 0; k < 4; ++k) set_base_part(k, nu);
}

void TailBank::set_base_part(int k, double nu) {
  assert(nu > 0 && k >= 0 && k < 4);
  state_.base = nu;
  table_[static_cast<std::size_t>(k)].build(channels_, nu_of(k), settings_.dynamics.floor_share);
}

void TailBank::update(double y, std::int64_t t, bool accumulate) {
  assert(state_.base > 0);
  for (std::size_t k = 0; k < 4; ++k) evidence_[k] = step_(table_[k], y, state_.filter[k]);
  if (!accumulate) {
    reset_sums();
    return;
  }
  leader_ = 0;
  for (std::size_t j = 0; j < 3; ++j) {
    double& sum = state_.sum[j];
    if (!(sum > 0)) {
      sum = 0;
      state_.begin[j] = t;
    }
    sum += std::min(settings_.cap, evidence_[j + 1] - evidence_[0]);
    if (sum > state_.sum[leader_]) leader_ = j;
  }
}

void TailBank::reset_sums() { state_.sum.fill(0); }

void TailBank::restart() {
  reset_sums();
  for (FilterState& filter : state_.filter) filter.reset();
}

void TailBank::restore(const BankState& state) {
  if (state.base > 0) set_base(state.base);
  state_ = state;
  leader_ = static_cast<std::size_t>(std::max_element(state_.sum.begin(), state_.sum.end()) -
                                     state_.sum.begin());
}

}  // namespace tailweir::detect

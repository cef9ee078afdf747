#include "service/assemble/changes.h"

#include <cassert>
#include <cmath>
#include <limits>

namespace tailweir {

bool in_range(double value) {
  const double magnitude = std::abs(value);
  return value == 0 || (magnitude >= kSmallestValue && magnitude <= kLargestValue);
}

ChangeAssembler::ChangeAssembler(const std::vector<ChannelSettings>& channels)
    : bases_(channels.size(), std::numeric_limits<double>::quiet_NaN()) {
  for (const ChannelSettings& channel : channels) {
    rules_.push_back({channel.enters_as, channel.step, channel.scale});
  }
}

ChangeAssembler::Trouble ChangeAssembler::preview(const std::vector<double>& values,
                                                  std::vector<double>& changes,
                                                  std::size_t& channel) const {
  assert(values.size() == rules_.size());
  changes.resize(values.size());
  for (channel = 0; channel < values.size(); ++channel) {
    const Rule& rule = rules_[channel];
    const double value = values[channel], base = bases_[channel];
    double change = value;
    if (!in_range(value)) return Trouble::out_of_range;
    if (rule.enters_as == EntersAs::level) {
      if (rule.step != Step::difference && !(value > 0)) return Trouble::not_positive;
      change = value - base;
      // ln(x/b) of close levels keeps its digits as log1p((x - b)/b): the difference is exact
      // there.
      if (rule.step == Step::log_difference) {
        change = std::abs(change) < base / 2 ? std::log1p(change / base)
                                             : std::log(value) - std::log(base);
      } else if (rule.step == Step::relative_difference) {
        change /= base;
      }
    }
    changes[channel] = rule.scale * change;
    const bool has_base = rule.enters_as == EntersAs::change || !std::isnan(base);
    if (has_base && !in_range(changes[channel])) return Trouble::out_of_range;
  }
  return Trouble::none;
}

void ChangeAssembler::commit(const std::vector<double>& values) {
  assert(values.size() == bases_.size());
  bases_ = values;
}

}  // namespace tailweir

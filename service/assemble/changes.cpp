#include "service/assemble/changes.h"

#include <cmath>
#include <cstdio>
#include <limits>

namespace tailweir {
namespace {

std::string shown(double value) {
  char text[32];
  std::snprintf(text, sizeof text, "%g", value);
  return text;
}

}  // namespace

Changes::Changes(const std::vector<ChannelSettings>& channels)
    : channels_(channels), base_(channels.size(), std::numeric_limits<double>::quiet_NaN()) {}

Result<std::vector<double>> Changes::look(const std::vector<double>& values) const {
  std::vector<double> changes(values.size(), std::numeric_limits<double>::quiet_NaN());
  for (std::size_t k = 0; k < values.size(); ++k) {
    const ChannelSettings& channel = channels_[k];
    const double x = values[k];
    const double base = base_[k];
    if (std::isnan(x)) continue;
    if (channel.enters_as == EntersAs::change) {
      changes[k] = channel.scale * x;
      continue;
    }
    if (channel.step == Step::log_difference && !(x > 0)) {
      return Fault{channel.name, "level " + shown(x) + " has no logarithm",
                   "a level above 0 for step log_difference"};
    }
    if (channel.step == Step::relative_difference && x == 0) {
      return Fault{channel.name, "level 0 has no relative change after it",
                   "a level other than 0 for step relative_difference"};
    }
    if (std::isnan(base)) continue;
    switch (channel.step) {
      case Step::log_difference:
        changes[k] = channel.scale * std::log(x / base);
        break;
      case Step::difference:
        changes[k] = channel.scale * (x - base);
        break;
      case Step::relative_difference:
        changes[k] = channel.scale * (x / base - 1);
        break;
    }
  }
  return changes;
}

void Changes::take(const std::vector<double>& values) {
  for (std::size_t k = 0; k < values.size(); ++k) {
    if (!std::isnan(values[k]) && channels_[k].enters_as == EntersAs::level) base_[k] = values[k];
  }
}

bool Changes::lacks_base(const std::vector<double>& values) const {
  for (std::size_t k = 0; k < values.size(); ++k) {
    if (channels_[k].enters_as == EntersAs::level && !std::isnan(values[k]) &&
        std::isnan(base_[k])) {
      return true;
    }
  }
  return false;
}

}  // namespace tailweir

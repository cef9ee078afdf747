#include "core/settings.h"

#include <Eigen/Cholesky>
#include <cmath>
#include <set>

namespace tailweir {
namespace {

Fault wrong(std::string where, std::string what, std::string allowed) {
  return {std::move(where), std::move(what), std::move(allowed)};
}

bool is_half_life(Memory::Kind kind) {
  return kind == Memory::Kind::half_life_samples || kind == Memory::Kind::half_life_time;
}

std::string shown(double value) {
  std::string text = std::to_string(value);
  while (text.size() > 1 && text.back() == '0') text.pop_back();
  if (text.back() == '.') text.pop_back();
  return text;
}

std::optional<Fault> check_nu(const PanelSettings& panel) {
  const NuSettings& nu = panel.nu;
  const std::string key = "degrees_of_freedom";
  const bool centre = panel.centre.kind == CentreKind::estimated;
  if (nu.method == NuMethod::fixed) {
    if (!(nu.fixed > 0) || !(nu.fixed <= 1e6)) {
      return wrong(key, "degrees of freedom must be positive", "a number above 0, at most 1e6");
    }
    if (centre && !(nu.fixed > 1)) {
      return wrong(key, "an estimated centre needs more than 1 degree of freedom",
                   "a number above 1, or centre: zero");
    }
    return {};
  }
  if (!(nu.floor > 0) || !std::isfinite(nu.floor)) {
    return wrong(key + ".floor", "the floor must be positive", "a number above 0, such as 0.3");
  }
  if (!(nu.ceiling > nu.floor) || !(nu.ceiling <= 1e6)) {
    return wrong(key + ".ceiling",
                 "the ceiling " + shown(nu.ceiling) + " is not above the floor " + shown(nu.floor),
                 "a number above the floor, at most 1e6");
  }
  if (!(nu.prior_rate >= 0) || !(nu.prior_rate <= 1e4)) {
    return wrong(key + ".prior_rate", "the prior rate must not be negative",
                 "a number from 0 to 1e4; 10 is the default");
  }
  return {};
}

std::optional<Fault> check_shrinkage(const PanelSettings& panel) {
  const ShrinkageSettings& s = panel.shrinkage;
  if (s.intensity && !(*s.intensity >= 0 && *s.intensity <= 1)) {
    return wrong("shrinkage.intensity",
                 "the intensity " + shown(*s.intensity) + " is outside [0, 1]",
                 "automatic, or a number from 0 to 1");
  }
  if (s.target != ShrinkageTarget::given) return {};
  if (s.given.rows() != panel.channels || s.given.cols() != panel.channels) {
    return wrong("shrinkage.target",
                 "the target is not " + std::to_string(panel.channels) + " x " +
                     std::to_string(panel.channels),
                 "one row and one column per channel of the panel");
  }
  if (!s.given.allFinite() || (s.given - s.given.transpose()).norm() > 1e-12 * s.given.norm()) {
    return wrong("shrinkage.target", "the target is not symmetric",
                 "a symmetric positive definite matrix");
  }
  const Eigen::LLT<Eigen::MatrixXd> factor(s.given);
  if (factor.info() != Eigen::Success) {
    return wrong("shrinkage.target", "the target is not positive definite",
                 "a symmetric positive definite matrix");
  }
  return {};
}

std::optional<Fault> check_horizon(const PanelSettings& panel, const HorizonSettings& horizon) {
  const std::string key = "horizons." + horizon.name;
  const double length = horizon.memory.length;
  const bool half = is_half_life(horizon.memory.kind);
  const std::string memory = key + (half ? ".half_life" : ".window");
  if (!(length > 0) || !std::isfinite(length)) {
    return wrong(memory, half ? "the half-life must be positive" : "the window must be positive",
                 "a number of samples above 0, or a time such as 6h");
  }
  const bool in_samples = horizon.memory.kind == Memory::Kind::window_samples ||
                          horizon.memory.kind == Memory::Kind::half_life_samples;
  if (in_samples && length > 1e7) {
    return wrong(memory, "the memory of " + shown(length) + " samples is too long", "at most 1e7");
  }
  if (horizon.memory.kind == Memory::Kind::window_samples && length != std::floor(length)) {
    return wrong(memory, "a window counts whole samples", "a whole number, or a time such as 6h");
  }
  if (in_samples && panel.shrinkage.target == ShrinkageTarget::none) {
    const double least = static_cast<double>(panel.channels + 1);
    const double lambda = std::exp2(-1 / length);
    const double n = half ? (1 + lambda) / (1 - lambda) : length;
    const double needed = panel.centre.kind == CentreKind::estimated ? least + 1 : least;
    if (n < needed) {
      return wrong(
          memory,
          "a memory of " + shown(n) + (half ? " effective samples" : " samples") +
              " is too short for " + std::to_string(panel.channels) + " channels",
          "at least " + shown(needed) + " (five times the channels is comfortable), or shrinkage");
    }
  }
  if (horizon.tolerance && !(*horizon.tolerance >= 1e-12 && *horizon.tolerance <= 10)) {
    return wrong(key + ".tolerance", "the tolerance is out of range",
                 "a number from 1e-12 (exact at every sample) to 10, or leave it out");
  }
  return {};
}

}  // namespace

Result<PanelSettings> validate(PanelSettings panel) {
  if (panel.channels < 1)
    return wrong("channels", "a panel needs a channel", "at least one channel");
  if (panel.centre.kind == CentreKind::given) {
    if (panel.centre.given.size() != panel.channels || !panel.centre.given.allFinite()) {
      return wrong("centre",
                   "the centre has " + std::to_string(panel.centre.given.size()) + " numbers for " +
                       std::to_string(panel.channels) + " channels",
                   "one finite number per channel, or zero, or estimated");
    }
  }
  if (auto fault = check_nu(panel)) return *fault;
  if (auto fault = check_shrinkage(panel)) return *fault;
  if (!(panel.flags.rate > 0 && panel.flags.rate < 1)) {
    return wrong("flags.rate", "the rate of flags is outside (0, 1)", "a share such as 0.001");
  }
  if (!(panel.flags.severe_rate > 0 && panel.flags.severe_rate <= panel.flags.rate)) {
    return wrong("flags.severe_rate", "the rate of severe flags is above the rate of flags",
                 "a share above 0 and at most the rate");
  }
  if (panel.alerts.on && !(panel.alerts.mean_samples_between_false > 100)) {
    return wrong("alerts", "mean_samples_between_false is too small",
                 "a number above 100, such as 5000");
  }
  if (panel.horizons.empty()) {
    return wrong("horizons", "a panel needs a horizon", "at least one window or half-life");
  }
  std::set<std::string> names;
  for (const HorizonSettings& horizon : panel.horizons) {
    if (!names.insert(horizon.name).second) {
      return wrong("horizons." + horizon.name, "two horizons have this name", "distinct names");
    }
    if (auto fault = check_horizon(panel, horizon)) return *fault;
  }
  return panel;
}

}  // namespace tailweir

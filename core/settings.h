// Plain settings of the estimation core: what a panel is asked to estimate and with which memory.
//
// Defaults stand beside the members. validate() names the first wrong member by its key in the
// settings file, so that a caller can add file, line and column. Nothing here speaks of speed:
// every member changes results. Thread rule: plain values.
#pragma once

#include <Eigen/Core>
#include <optional>
#include <string>
#include <vector>

#include "core/result.h"

namespace tailweir {

using Index = Eigen::Index;

// How far back a horizon looks.
struct Memory {
  enum class Kind {
    window_samples,     // the last `length` samples, equal weights
    window_time,        // the samples of the last `length` seconds, equal weights
    half_life_samples,  // weight 2^(-age/length), age in samples
    half_life_time      // weight 2^(-age/length), age in seconds
  };
  Kind kind = Kind::window_samples;
  double length = 0;  // samples or seconds, > 0; whole for window_samples
};

enum class CentreKind { zero, estimated, given };

struct CentreSettings {
  CentreKind kind = CentreKind::zero;
  Eigen::VectorXd given;  // p values in the channels' units, for CentreKind::given
};

// How nu is obtained. Published sources stand in core/tail/tail.h.
enum class NuMethod { fixed, leave_one_out, likelihood, pop, trace_ratio, kurtosis, censored };

struct NuSettings {
  NuMethod method = NuMethod::leave_one_out;
  double fixed = 4;        // > 0, for NuMethod::fixed
  double floor = 0.3;      // > 0: no published nu lies below
  double ceiling = 1000;   // > floor: no published nu lies above
  double prior_rate = 10;  // >= 0: rate r of the Gamma(2, rate r) prior on 1/nu (leave_one_out)
};

enum class ShrinkageTarget { none, identity, diagonal, constant_correlation, given };

struct ShrinkageSettings {
  ShrinkageTarget target = ShrinkageTarget::none;
  std::optional<double> intensity;  // rho in [0, 1]; nothing means automatic
  Eigen::MatrixXd given;            // p x p, positive definite, for ShrinkageTarget::given
};

struct HorizonSettings {
  std::string name;
  Memory memory;
  // Largest residual (affine-invariant distance to the exact fixed point) the horizon may publish.
  // Nothing means a fifth of the statistical error. 1e-10 is exact at every sample.
  std::optional<double> tolerance;
};

struct FlagSettings {
  double rate = 1e-3;         // nominal share of samples flagged, in (0, 1)
  double severe_rate = 1e-4;  // nominal share flagged as severe, in (0, rate]
};

// Shift alerts of a horizon. Off: nothing is watched.
struct AlertRates {
  bool on = true;
  double mean_samples_between_false = 5000;  // all kinds and directions together, > 100
};

struct PanelSettings {
  std::string name;
  Index channels = 0;  // p >= 1
  CentreSettings centre;
  NuSettings nu;
  ShrinkageSettings shrinkage;
  FlagSettings flags;
  AlertRates alerts;
  std::vector<HorizonSettings> horizons;  // at least one, names distinct
};

// Checks one panel's settings. Returns the panel, or a Fault whose `where` is the key inside the
// panel ("horizons.slow.window", "degrees_of_freedom.floor", ...). Cost O(p + horizons), and
// O(p^3) for a given shrinkage target.
Result<PanelSettings> validate(PanelSettings panel);

}  // namespace tailweir

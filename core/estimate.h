// What a horizon knows after a sample, and what a flag says: the plain results of the core.
//
// The wire, the records and the page carry these fields under these names. Thread rule: plain
// values.
#pragma once

#include <cstdint>
#include <vector>

#include "core/detect/alert.h"
#include "core/settings.h"
#include "core/tail/tail.h"

namespace tailweir {

enum class HorizonState { warming = 0, live = 1, impaired = 2, held = 3 };

// Why a horizon is not live, or what to know about it; stable numbers (they go on the wire).
enum class StateReason {
  none = 0,
  too_few_samples = 1,
  not_positive_definite = 2,  // channels constant or exactly collinear
  not_converged = 3,          // iteration limit: aligned outliers beyond the breakdown point
  ill_conditioned = 4,
  not_finite = 5
};

// What a horizon knows after a sample. Numbers that are not defined are NaN.
struct Estimate {
  HorizonState state = HorizonState::warming;
  StateReason reason = StateReason::too_few_samples;
  double nu = 0, nu_low = 0, nu_high = 0;
  double nu_fit = 0;  // nu at which the scatter is the fixed point: clamp(nu, 2, 50) or its own
  tail::NuStatus nu_status = tail::NuStatus::not_identified;
  double covariance_factor = 0;   // nu/(nu - 2); NaN when nu <= 2
  double samples_effective = 0;   // n for a window, 1/sum v^2 for a half-life
  double log_volatility = 0;      // ln det(scatter)/(2p)
  double residual = 0;            // estimated affine-invariant distance to the exact fixed point
  int iterations = 0;             // fixed-point iterations made for this sample
  std::int64_t since_polish = 0;  // samples since the last whole fixed-point iteration
  double distance = 0;            // squared Mahalanobis of the sample, before it was absorbed
  double p_value = 0;             // P(D >= distance) under the fit before it was absorbed
  double coverage = 1;            // share of the window's entries that were observed
  double condition = 0;           // condition number of the scatter, estimated
};

// A channel's part in a flagged sample.
struct ChannelBlame {
  Index channel = 0;    // index in the panel
  double value = 0;     // as given
  double residual = 0;  // conditional residual r_j = q_j / sqrt(P_jj), in conditional scatter units
  double share = 0;     // additive share x_j q_j of the distance
  double p_value = 0;   // two-sided, given the other channels
};

enum class Severity { usual = 0, unusual = 1, severe = 2 };

struct Flag {
  Index horizon = 0;
  double distance = 0;
  double p_value = 0;        // combined: joint and channel tests together; what the rates judge
  double joint_p_value = 0;  // of the distance: mixed F, then the running fit
  double rank_p_value = 0;   // share of past distances at least as large, (1 + #)/(K + 1)
  Severity severity = Severity::usual;
  std::vector<ChannelBlame> channels;  // largest |residual| first, at most 5
};

// An alert of a horizon's monitors that has just changed its stage.
struct HorizonAlert {
  Index horizon = 0;
  detect::Alert alert;           // counts samples by its own monitor
  std::int64_t samples_ago = 0;  // how long ago the change began, in samples its monitor saw
};

}  // namespace tailweir

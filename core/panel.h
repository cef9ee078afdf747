// One panel: for each of its horizons a scatter tracker, the degrees of freedom and the flags; what
// the engine holds and feeds one sample at a time.
//
// A sample is scored before it is absorbed: `distance` and `p_value` are predictive. Thread rule: one
// panel belongs to one thread. Determinism: results depend on the samples and their times only.
#pragma once

#include <Eigen/Core>
#include <cstdint>
#include <memory>
#include <string>
#include <vector>

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
  double covariance_factor = 0;  // nu/(nu - 2); NaN when nu <= 2
  double samples_effective = 0;  // n for a window, 1/sum v^2 for a half-life
  double log_volatility = 0;     // ln det(scatter)/(2p)
  double residual = 0;           // estimated affine-invariant distance to the exact fixed point
  int iterations = 0;            // fixed-point iterations made for this sample
  std::int64_t since_polish = 0; // samples since the last whole fixed-point iteration
  double distance = 0;           // squared Mahalanobis of the sample, before it was absorbed
  double p_value = 0;            // P(D >= distance) under the fit before it was absorbed
  double coverage = 1;           // share of the window's entries that were observed
  double condition = 0;          // condition number of the scatter, estimated
};

// A channel's part in a flagged sample.
struct ChannelBlame {
  Index channel = 0;     // index in the panel
  double value = 0;      // as given
  double residual = 0;   // conditional residual r_j = q_j / sqrt(P_jj), in conditional scatter units
  double share = 0;      // additive share x_j q_j of the distance
  double p_value = 0;    // two-sided, given the other channels
};

enum class Severity { usual = 0, unusual = 1, severe = 2 };

struct Flag {
  Index horizon = 0;
  double distance = 0;
  double p_value = 0;
  Severity severity = Severity::usual;
  std::vector<ChannelBlame> channels;  // largest |residual| first, at most 5
};

class Panel {
 public:
  // Precondition: settings came out of validate().
  explicit Panel(PanelSettings settings);
  ~Panel();
  Panel(Panel&&) noexcept;
  Panel& operator=(Panel&&) noexcept;

  // Scores and absorbs one sample. x: p finite values in the channels' units; time_ns: not before the
  // last one's. Cost O(horizons p^2) plus the polish that falls due.
  void push(const Eigen::Ref<const Eigen::VectorXd>& x, std::int64_t time_ns);

  Index channels() const;
  Index horizons() const;
  const PanelSettings& settings() const;

  // Results of the last push, for horizon h in [0, horizons()).
  const Estimate& estimate(Index h) const;
  const std::vector<Flag>& flags() const;

  // Writes the current scatter (p x p) and centre (p) of horizon h. False, with both untouched, while
  // it has none (warming, or never live). O(p^2) to O(p^3).
  bool scatter(Index h, Eigen::MatrixXd& scatter, Eigen::VectorXd& centre) const;

 private:
  struct Body;
  std::unique_ptr<Body> body_;
};

}  // namespace tailweir

// Scale alert: has volatility jumped away from what the scatter expects?
//
//   Z_a = lf(y - m - a; p, nu) - lf(y - m; p, nu),  a = +2 ln 1.5 (up) and -2 ln 1.5 (down),
//   S_a = max(0, S_a) + Z_a,
// with m and nu those of the running fit, frozen while an alert is open. No cap: the increments are
// bounded by p |a|/2 and nu |a|/2. It fires under volatility clustering by design. Confirmation,
// return (the reverse ratio) and re-reference as in alert.h. Published source: Page, Biometrika 41,
// 1954; thresholds exact by cusum_chain.h. Cost: three logarithms a sample. Thread rule: one owner.
#pragma once

#include <array>
#include <cstdint>

#include "core/detect/alert.h"

namespace tailweir::detect {

inline constexpr double kScaleShift = .810930216216328764;  // 2 ln 1.5, in ln D

struct ScaleSettings {
  double channels = 1;
  double mean_samples_up = 5000, mean_samples_down = 5000;
  std::int64_t re_reference_after = 500;
  std::int64_t longest_raise = 1000;
};

// Plain state, to be stored and restored as it is.
struct ScaleState {
  std::int64_t t = 0;
  AlertStage stage = AlertStage::armed;
  std::array<double, 2> sum{};  // up, down
  std::array<std::int64_t, 2> begin{};
  double nu = 0, centre = 0;  // in use; frozen while open
  double offset = 0;          // agreed shift of the reference since
  double threshold_nu = 0;
  std::array<double, 2> threshold{};
  double reverse = 0;    // CUSUM of the return
  double since_sum = 0;  // sum of y since the raise
  std::int64_t since_count = 0;
  Alert alert;
};

class ScaleMonitor {
 public:
  explicit ScaleMonitor(const ScaleSettings& settings) : settings_(settings) {}

  // y = ln D; nu and log_scale (a) of the running fit. Returns true when the stage changed. hold:
  // as for the tail monitor.
  bool push(double y, double nu, double log_scale, bool hold = false);
  AlertStage stage() const { return state_.stage; }
  const Alert& alert() const { return state_.alert; }
  bool explain();
  // Takes back a raise without a word and starts the sums over.
  void retest();

  const ScaleState& state() const { return state_; }
  void restore(const ScaleState& state) { state_ = state; }

 private:
  void adopt(double nu, double log_scale);
  bool follow(double y, const std::array<double, 2>& z);
  void close(AlertStage stage);

  ScaleSettings settings_;
  ScaleState state_;
};

}  // namespace tailweir::detect

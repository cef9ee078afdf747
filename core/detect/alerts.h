// All monitors of one horizon: what is fed, in which order causes are told apart, how the wanted
// rate of false alerts is shared.
//
// The wanted mean number of samples between false raises is joint: with K watched directions (tail
// heavier and lighter, scale up and down, shape) each gets K times as many. Cause order: shape,
// then scale, then tail. A change of correlation alone drives the tail statistic, so while a shape
// alert is open the tail monitor is held, and an open tail alert that began within the shape
// monitor's memory is closed as explained. A scale raise within 100 samples of a confirmed tail
// change is dropped and tested again under the new nu. Volatility needs no hold: the tail monitor
// filters it.
//
// Cost: 1 to 1.5 us plus the shape monitor's p^2 multiply-adds in matrix products. No allocation
// after construction. Thread rule: one owner.
#pragma once

#include <Eigen/Core>
#include <array>
#include <cstdint>
#include <optional>

#include "core/detect/alert.h"
#include "core/detect/scale_monitor.h"
#include "core/detect/shape_monitor.h"
#include "core/detect/tail_monitor.h"

namespace tailweir::detect {

// Exact repeats: a stale channel repeats its level, so its change is exactly zero.
struct RepeatScreen {
  Index fewest = 2;  // channels that must repeat; one is enough when p = 1
  std::int64_t screened = 0;
  // x: one sample of changes (zeros count) or of levels (previous values count, when given).
  bool stale(const Eigen::Ref<const Eigen::VectorXd>& x, const Eigen::VectorXd* previous = nullptr);
};

struct AlertSettings {
  Index channels = 1;
  double mean_samples_between_false = 5000;      // all kinds and directions together
  bool tail = true, scale = true, shape = true;  // shape needs two channels
  TailSettings tail_details;                     // channels and mean_samples are filled in
  ShapeSettings shape_details;
};

// One sample as the monitors see it, before it is absorbed.
struct AlertInput {
  double distance = 0;  // predictive D of a whole sample
  bool fresh = true;    // false: screened (stale) or partial; nothing is fed
  bool fitted = false;  // running fit ready: nu and log_scale below are its
  double nu = 0, log_scale = 0;
  const Eigen::VectorXd* centred = nullptr;  // x (p), for the shape monitor; may be absent
};

// Changes of stage after one sample, at most one a kind.
struct AlertEvents {
  std::array<Alert, 4> event;
  int count = 0;
  void add(const Alert& alert) {
    if (count < static_cast<int>(event.size())) event[static_cast<std::size_t>(count++)] = alert;
  }
};

struct AlertsState {
  TailState tail;
  ScaleState scale;
  std::optional<ShapeState> shape;
  std::int64_t t = 0, tail_confirmed_at = -1;
};

class Alerts {
 public:
  explicit Alerts(const AlertSettings& settings);

  const AlertEvents& push(const AlertInput& input);

  TailMonitor& tail() { return tail_; }
  const TailMonitor& tail() const { return tail_; }
  const ScaleMonitor& scale() const { return scale_; }
  bool has_shape() const { return shape_.has_value(); }
  ShapeMonitor& shape() { return *shape_; }
  const ShapeMonitor& shape() const { return *shape_; }
  // Mean samples between false raises of each single direction.
  double mean_samples_per_direction() const { return per_direction_; }

  AlertsState state() const;
  void restore(const AlertsState& state);

 private:
  void push_shape(const AlertInput& input);
  void push_tail(double y);
  void push_scale(double y, const AlertInput& input);

  AlertSettings settings_;
  double per_direction_;
  TailMonitor tail_;
  ScaleMonitor scale_;
  std::optional<ShapeMonitor> shape_;
  AlertEvents events_;
  std::int64_t t_ = 0, tail_confirmed_at_ = -1;
};

}  // namespace tailweir::detect

// Shape alert: have the correlations moved, whatever scale and tails do?
//
// With S = L L' a reference scatter and g = L^-1 x/|L^-1 x| the direction of a sample,
//   M <- (1 - l) M + l p g g',  l = 2/(5p + 1)   the last 5p samples,
//   R <- exponential mean of M, ten times longer   its own reference: S need not be exact,
//   Q = |M - R|_F^2 / (p (p - 1) sum_k (m_k - r_k)^2)   about 1 when nothing moves,
// m_k and r_k being the weights of the sample k ago. g is free of scale and of nu. Samples are
// taken in batches of 8, so that whitening and update run as matrix products. Tyler's directions
// (Tyler, Annals of Statistics 15, 1987); the monitor is derived in core/detect/README.md.
//
// A raise freezes R and fixes the direction A = (M - R)/|M - R|_F; fresh samples are tested along
// it: z = p g'A g - <A, R>, variance 2p/(p + 2), mean 0 or delta = |M - R|_F (Q - 1)/Q. The pair
// named is that of the largest change of correlation in channels' units. Cost a sample: about p^2
// multiply-adds in matrix products. No allocation after construction. Thread rule: one owner.
#pragma once

#include <Eigen/Core>
#include <cstdint>

#include "core/detect/alert.h"
#include "core/settings.h"

namespace tailweir::detect {

struct ShapeSettings {
  Index channels = 2;           // p >= 2
  double memory = 5;            // samples of M per channel
  double reference_ratio = 10;  // memory of R over memory of M; 0: R is known to be I
  Index batch = 8;
  double mean_samples = 5000;
  double threshold = 0;                   // > 0 instead of the shipped table's
  std::int64_t re_reference_after = 500;  // at least two memories of M
  std::int64_t longest_raise = 1000;
};

// Plain state, to be stored and restored as it is.
struct ShapeState {
  std::int64_t t = 0;         // samples fed
  std::int64_t absorbed = 0;  // samples in M
  AlertStage stage = AlertStage::learning;
  bool whitening = false;
  Eigen::MatrixXd whitener;    // L, lower
  Eigen::MatrixXd fast, slow;  // M, R: lower triangles
  Eigen::MatrixXd block;       // p x batch, samples waiting
  Index filled = 0;
  double q = 1;
  bool ready = false;     // Q has been below the threshold since the last alert
  std::int64_t wait = 0;  // or this many samples more
  Eigen::MatrixXd along;  // A, lower, while an alert is open
  double delta = 0, along_reference = 0, reverse = 0;
  std::int64_t above_since = 0;
  Alert alert;
};

class ShapeMonitor {
 public:
  explicit ShapeMonitor(const ShapeSettings& settings);

  // Takes the scatter that whitens from now on and starts learning again. False, nothing changed,
  // when it is not positive definite. p^3/6.
  bool set_reference(const Eigen::Ref<const Eigen::MatrixXd>& scatter);

  // x: p values, the centred sample (or a whitened one when set_reference() was never called); its
  // length does not matter. A zero sample is ignored. Returns true when the stage changed.
  bool push(const Eigen::Ref<const Eigen::VectorXd>& x);

  AlertStage stage() const { return state_.stage; }
  const Alert& alert() const { return state_.alert; }
  double statistic() const { return state_.q; }
  double threshold() const { return threshold_; }
  // True while a change of correlation may be moving the other monitors.
  bool active() const { return state_.alert.open(); }
  bool armed() const { return state_.stage != AlertStage::learning; }

  const ShapeState& state() const { return state_; }
  void restore(const ShapeState& state) { state_ = state; }

 private:
  void whiten_block();
  void update_fast();
  void update_slow(bool frozen);
  bool watch();
  void raise();
  void name_pair(Alert& alert);
  bool follow();
  void close(AlertStage stage);

  ShapeSettings settings_;
  double p_, rate_, slow_rate_, norm_, threshold_;
  std::int64_t learn_;
  double square_ = 0;  // |M - R|_F^2 of the last batch
  Eigen::MatrixXd scaled_, scratch_;
  Eigen::VectorXd product_;
  ShapeState state_;
};

}  // namespace tailweir::detect

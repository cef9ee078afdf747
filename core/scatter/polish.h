// A polish: one whole fixed-point iteration over all remembered samples, in bounded steps.
//
//   P = L L',  Y = L' X,  h_j = omega_j w_j |y_j|^2,  d1_j = W |y_j|^2/(1 - h_j),  c_j = omega_j
//   d1_j/M, u_j the leave-one-out weight (weight.h),  G = sum_j omega_j u_j y_j y_j' + L' E L,
//   P_new = L G^-1 L',  W_new = sum omega_j u_j + W_E,  w_j := u_j.
// The distance of the state before it to the fixed point is free: with D = G W/M and
// t = tr(D)/p - 1, F^2 = gs^2 |D - (1 + t) I|_F^2 + gc^2 p t^2 (gains in weight.h; for unequal
// masses t comes from the mean weight, see judge()).
//
// It works on a snapshot of P while the tracker goes on; samples that entered or left meanwhile are
// replayed on the new matrix at the end, two a step, until it has caught up. What is done in a step
// depends on sizes only, so results do not depend on time. No allocation after construction, except
// for matching a grown ring. Thread rule: one owner.
#pragma once

#include <Eigen/Core>
#include <cstdint>
#include <vector>

#include "core/scatter/precision.h"
#include "core/scatter/ring.h"

namespace tailweir {

// The state a polish starts from; dimension D = p + lift, nu the lifted one.
struct PolishStart {
  double total = 0;              // W
  double mass = 0;               // M
  double nu = 4;                 // of the weights (nu - 1 when lifted)
  double channels = 1;           // p of the weights (p + 1 when lifted)
  int current = 0;               // which of the ring's weights is in use
  double tail_total = 0;         // W_E
  double samples_effective = 0;  // n_eff when masses differ, 0 when they are equal
};

class Polish {
 public:
  enum class Stage {
    idle,
    factor,
    condition,
    samples,
    tail,
    judge,
    solve,
    form,
    replay,
    done,
    failed
  };

  // dimension D; lift 1 when the constant is the last component.
  Polish(Index dimension, Index lift);

  // Snapshots P (settled by the call) and the samples now in the ring. Abandons one under way.
  void start(Precision& precision, const SampleRing& ring, const PolishStart& from);
  // One bounded step. tail: E (D x D, lower) or empty.
  void step(SampleRing& ring, const Eigen::MatrixXd& tail);
  void abandon() { stage_ = Stage::idle; }

  Stage stage() const { return stage_; }
  bool active() const {
    return stage_ != Stage::idle && stage_ != Stage::done && stage_ != Stage::failed;
  }

  // Multiply-adds of a whole polish over n samples, which decides between one go and steps.
  static double cost(Index dimension, Index n, bool tail);

  // Results at Stage::done.
  Precision& precision() { return next_; }
  double residual() const { return residual_; }  // F of the state it started from
  double total() const { return total_; }        // W_new
  double log_det() const { return log_det_; }    // ln det A_new
  std::int64_t first() const { return first_; }  // the snapshot's samples
  std::int64_t last() const { return last_; }
  const PolishStart& from() const { return from_; }
  double centre_residual() const { return centre_residual_; }  // |m_new - m| in S, times its gain
  double condition() const { return condition_; }  // of the P it started from, estimated from below

 private:
  void factor();
  void estimate_condition();
  void samples(SampleRing& ring);
  void add_tail(const Eigen::MatrixXd& tail);
  void judge();
  void solve();
  void form();
  void replay(SampleRing& ring);
  Index columns_a_step() const;

  Index dimension_, lift_;
  Stage stage_ = Stage::idle;
  PolishStart from_;
  std::int64_t first_ = 0, last_ = 0;    // snapshot range
  std::int64_t cursor_ = 0;              // next sample of the pass
  std::int64_t entered_ = 0, left_ = 0;  // replayed up to
  Index block_ = 0;                      // next column block of solve and form
  Eigen::MatrixXd factor_, gram_, columns_, z_, formed_;
  Eigen::MatrixXd directions_;  // D x 2, where the power iterations stand
  Precision next_;
  std::vector<double> x_, y_, x2_, y2_;
  double residual_ = 0, centre_residual_ = 0, total_ = 0, mass_ = 0, log_det_ = 0, condition_ = 1;
};

}  // namespace tailweir

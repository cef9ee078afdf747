// The streaming fixed point: scatter and centre of one horizon, kept current at O(p^2) a sample.
//
// With omega_i the mass of sample i (1 in a window, 2^(-age/half-life) for a half-life, up to a
// common factor), w_i its stored weight, the tracker holds P = A^-1 and W for
//   A = sum_i omega_i w_i x_i x_i' + E,   W = sum_i omega_i w_i + W_E,   M = sum_i omega_i + M_E,
//   S = A/W,  S^-1 = W P,  d = W x'Px,
// where E holds what is not in the ring: the old tail of a half-life. A sample enters with the
// leave-one-out weight of weight.h and leaves with exactly what it brought; a polish (polish.h)
// redoes all weights at once and lands on the fixed point S = sum omega u(d) x x' / sum omega u(d)
// again, u(d) = (p + nu)/(nu + d). Weights are stored in the scale w = u W/M, so that they need no
// rescaling. An estimated centre lifts the sample to (x - offset; 1), p + 1, nu - 1 (Kent, Tyler &
// Vardi, 1994).
//
// Samples are scaled by a power of two per channel, chosen when the tracker starts; results are in
// the channels' units. Between polishes the published residual is an estimate (gauge.h). After
// construction nothing is allocated, except when a time-based memory outgrows its ring. Derivation
// and measured figures: core/scatter/README.md. Thread rule: one owner; deterministic.
#pragma once

#include <Eigen/Core>
#include <cstdint>
#include <vector>

#include "core/scatter/gauge.h"
#include "core/scatter/missing_sample.h"
#include "core/scatter/polish.h"
#include "core/scatter/precision.h"
#include "core/scatter/ring.h"
#include "core/settings.h"

namespace tailweir {

// Why a tracker has no current scatter.
enum class TrackerState {
  filling,                // too few samples: nothing to publish
  tracking,               // current
  not_positive_definite,  // the remembered samples span less than p dimensions
  ill_conditioned,        // condition number beyond 1e12
  not_converged           // polishes do not settle: too many aligned outliers
};

struct TrackerSettings {
  Index channels = 1;
  CentreSettings centre;
  Memory memory;
  double tolerance =
      0;  // residual that may be published, > 0; 0 means a fifth of the statistical error
};

// Counters and gauges of one tracker.
struct TrackerHealth {
  double residual = 0;            // estimated distance to the exact fixed point, now
  double residual_at_polish = 0;  // measured distance just before the last polish
  double samples_effective = 0;   // M^2 / sum omega^2
  double condition = 0;           // of the scatter in scaled channels, as of the last polish
  double log_det = 0;             // ln det S, channels' units
  std::int64_t since_polish = 0;  // samples since the state the last polish worked on
  int iterations = 0;             // whole fixed-point iterations finished during the last absorb
  std::int64_t polishes = 0;
  std::int64_t rebuilds = 0;
};

class Tracker {
 public:
  // nu: first value the fixed point is taken at (> 1 when the centre is estimated).
  Tracker(const TrackerSettings& settings, double nu);

  // Looks at the next sample without taking it: x holds p values, |x| <= 1e150, not-a-number where
  // an entry is missing (at least one is observed); time_ns is not before the last one's. Returns
  // its squared Mahalanobis distance, NaN unless tracking().
  double predict(const Eigen::Ref<const Eigen::VectorXd>& x, std::int64_t time_ns);
  // Takes the sample of the last predict().
  void absorb();

  // Entries missing from the sample of the last predict(), rising; and how much of the memory was
  // observed: the share of all entries in the ring, and of each channel's.
  const std::vector<Index>& missing_now() const { return missing_now_; }
  double coverage() const;
  double coverage(Index channel) const;

  bool tracking() const { return state_ == TrackerState::tracking; }
  TrackerState state() const { return state_; }
  const TrackerHealth& health() const { return health_; }

  // nu of the weights from now on; takes effect at the next sample and polish.
  void set_nu(double nu);
  double nu() const { return nu_; }
  // One more whole iteration now (joint estimation of nu asks for it). False when it failed.
  bool polish_now();

  // What is known per sample of the ring, oldest first: mass (sum 1), weight u and distance. After
  // an absorb() or polish_now() that finished an iteration (health().iterations > 0) as it left
  // them; refresh_view() brings the samples since up to date from what they had when they entered,
  // O(n).
  void refresh_view();
  Index view_size() const { return view_size_; }
  const Eigen::ArrayXd& view_mass() const { return view_mass_; }
  const Eigen::ArrayXd& view_weight() const { return view_weight_; }
  const Eigen::ArrayXd& view_distance() const { return view_distance_; }
  // |o| of each, or nullptr when all are complete.
  const double* view_observed() const { return partials_ > 0 ? view_observed_.data() : nullptr; }
  double view_nu() const { return view_nu_; }
  // nu of the last finished iteration: the one the scatter is the fixed point of.
  double fit_nu() const { return fit_nu_; }
  // Share of M that is in the ring (the rest is the frozen tail).
  double ring_share() const;
  // Sample k of the view in the channels' units.
  void view_sample(Index k, Eigen::Ref<Eigen::VectorXd> x) const;

  // For the sample of the last predict(), before it is absorbed: S^-1 (x - m) (p) and diag(S^-1)
  // (p), channels' units. O(p). Precondition: tracking(). Valid between predict() and absorb().
  void residuals(Eigen::Ref<Eigen::VectorXd> q,
                 Eigen::Ref<Eigen::VectorXd> precision_diagonal) const;
  // The same sample's x - m (p). O(p^3/6) with an estimated centre, O(p) otherwise.
  void centred(Eigen::Ref<Eigen::VectorXd> x) const;

  // The same against the centre of the last polish, O(p): for directions, not for distances.
  void centred_roughly(Eigen::Ref<Eigen::VectorXd> x) const;

  // Current S (p x p, whole) and m (p), channels' units; the last good ones when not tracking().
  // False, both untouched, when there are none or they do not factorise. p^3/2 multiply-adds.
  bool scatter(Eigen::MatrixXd& s, Eigen::VectorXd& m) const;

 private:
  void lift_into(const Eigen::Ref<const Eigen::VectorXd>& x);
  double omega_of(std::int64_t position, std::int64_t time_ns) const;
  Index leaving(std::int64_t now) const;
  void take_slot();
  void start_if_ready();
  void choose_units();
  void remove_first();
  void remove_one();
  void drop_oldest();
  void enter_slowly();
  double multiply_new();
  void refresh_log_det();
  bool iterate_whole();
  Index observed(std::int64_t position) const;
  void remove_others();
  void enter();
  void probe();
  void check_samples_left();
  void retire_tail();
  void renormalise();
  void recount();
  bool build();
  bool form_scatter(const Eigen::MatrixXd& precision, double total, const Eigen::VectorXd& offset,
                    const Eigen::VectorXd& unit, Eigen::MatrixXd& s, Eigen::VectorXd& m) const;
  void rebuild();
  void fail(TrackerState state);
  void polish_if_due();
  bool iterate();
  void fill_view(double nu);
  // How an iteration ended: distance before it, of scatter and centre; condition; samples it saw;
  // nu.
  struct Finished {
    double residual, centre_residual, condition;
    std::int64_t first, last;
    double nu;
  };
  void adopt(const Finished& finished);
  void take_polish();
  void update_health();
  double unequal_masses() const;
  double statistical_error() const;
  double tolerance() const;
  double steady_samples() const;
  bool exact() const;
  double dot(const std::vector<double>& a, const double* b) const;

  TrackerSettings settings_;
  Index p_, lift_, dimension_;
  double nu_;
  double kept_half_lives_;
  TrackerState state_ = TrackerState::filling;
  TrackerHealth health_;

  SampleRing ring_;
  int current_ = 0;              // which of the ring's two weights is in use
  mutable Precision precision_;  // mutable: reading it applies what is queued
  double total_ = 0;             // W
  double mass_ = 0;              // M
  double mass_square_ = 0;       // sum omega^2
  double log_det_ = 0;           // ln det A, scaled channels
  Eigen::MatrixXd tail_;         // E (D x D, lower), weights of mean 1; empty for windows
  double tail_total_ = 0, tail_mass_ = 0, tail_square_ = 0;
  std::int64_t base_position_ = 0, base_time_ = 0;  // where omega is 1

  Eigen::VectorXd offset_, unit_;
  Eigen::VectorXd shift_;  // m - offset of the last polish, scaled
  std::vector<double> x_, y_, x_old_, y_old_, scratch_values_;
  double q_new_ = 0, q_old_ = 0, q_cross_ = 0;
  double enter_scale_ = 0;  // W/M before the removal that came with the new sample
  double shrink_ = 1;       // factor on an absurd sample, see lift_into()
  std::int64_t time_ = 0;
  Index departing_ = 0;
  std::int64_t probe_ = -1;  // ring position probed with this sample, or -1
  bool rebuild_wanted_ = false;
  std::int64_t retry_in_ = 0;
  std::int64_t taken_ = 0;  // samples ever taken
  int unsettled_ = 0;       // polishes in a row that found the state far off

  MissingSample missing_;
  std::vector<Index> missing_now_;
  Index partials_ = 0;                 // samples of the ring with missing entries
  std::vector<Index> missing_counts_;  // of each channel, in the ring
  std::vector<double> padded_column_;

  Polish polish_;
  Gauge gauge_;
  double contraction_ = .3;  // what a repeated iteration leaves of the distance, learned
  double after_ = 0;         // distance thought left by the last iteration
  mutable Eigen::MatrixXd scratch_, block_, column_, check_;
  Eigen::MatrixXd columns_;
  Index view_size_ = 0;
  std::int64_t view_first_ = 0;
  double view_nu_ = 0, fit_nu_ = 0;
  Eigen::ArrayXd view_mass_, view_weight_, view_distance_, view_observed_;

  Eigen::MatrixXd good_;  // P of the last polish, lower, with its W, offset and units
  double good_total_ = 0;
  Eigen::VectorXd good_offset_, good_unit_;
};

}  // namespace tailweir

// Tail alert of one horizon: are the tails getting heavier or lighter, whatever volatility does?
//
// Two banks (tail_bank.h) against a reference of its own (tail_reference.h), and the life of the
// alert (alert.h). From raised on nothing enters the reference. Dismissed: the samples since the
// change go back into it. Confirmed: the reverse test (recovery.h) watches for a return; if still
// confirmed `re_reference_after` samples after the change, the samples since become the reference
// and the monitor arms again on it.
//
// Cost: armed, eight filter steps and the reference's share, about .8 us. No allocation after
// construction. Thread rule: one owner.
#pragma once

#include <array>
#include <cstdint>

#include "core/detect/alert.h"
#include "core/detect/recovery.h"
#include "core/detect/tail_bank.h"
#include "core/detect/tail_reference.h"

namespace tailweir::detect {

struct TailSettings {
  double channels = 1;
  // Per direction: mean number of samples between false raises with the reference known.
  double mean_samples_heavier = 5000, mean_samples_lighter = 5000;
  std::int64_t reference_minimum = 1000;  // samples before anything is watched
  std::int64_t reference_memory = 2000;   // samples the reference looks back over
  std::int64_t re_reference_after = 500;  // samples after the change
  std::int64_t longest_raise = 1000;      // samples in `raised` before it is dismissed
  double guard = 1.28;                    // standard errors of ln nu0
  double known_nu = 0;                    // > 0: nu0 is known, neither learned nor guarded
};

// Plain state, to be stored and restored as it is.
struct TailState {
  std::int64_t t = 0;  // samples fed
  AlertStage stage = AlertStage::learning;
  ValueRing reference, since;
  std::array<NuFitState, 2> fit;
  std::array<BankState, 2> bank;
  RecoveryState recovery;
  Alert alert;          // the last one raised
  int alternative = 0;  // its j
  double start_nu = 8;
  int build_part = -1;  // tables of new banks still to come: next part; -1: none
  int warm = 0;         // samples left before the sums run
  std::array<double, 2> next_base{};
  std::array<double, 2> threshold{};
  // Thresholds by simulation: nu they were made for (0: none) and their excess over the table's.
  std::array<double, 2> calibrated_nu{}, excess{};
};

class TailMonitor {
 public:
  explicit TailMonitor(const TailSettings& settings);

  // Feeds one fresh (not stale) sample's y = ln D, D predictive; -infinity and NaN are ignored.
  // hold: a change of higher rank is under way, so nothing is concluded from this sample. Returns
  // true when the stage of alert() changed.
  bool push(double y, bool hold = false);

  std::int64_t count() const { return state_.t; }  // samples fed
  AlertStage stage() const { return state_.stage; }
  // The last alert raised (id 0: none yet).
  const Alert& alert() const { return state_.alert; }
  // Closes an open alert: something else explains it. True when there was one.
  bool explain();

  // nu0 of a direction before the guard; 0 while learning.
  double reference_nu(TailDirection direction) const;
  const TailBank& bank(TailDirection direction) const { return bank_[at(direction)]; }
  double threshold(TailDirection direction) const { return state_.threshold[at(direction)]; }
  double log_scale() const { return bank_[0].base() > 0 ? bank_[0].log_scale() : 0; }
  // Where the first fit begins; the horizon's estimate, when there is one.
  void set_start(double nu) { state_.start_nu = nu; }
  // A threshold simulated for the base `nu`; used while the base stays within .1 in ln nu of it.
  void set_threshold(TailDirection direction, double nu, double threshold);

  TailState state() const;
  void restore(const TailState& state);

 private:
  static std::size_t at(TailDirection direction) { return static_cast<std::size_t>(direction); }
  double mean_samples(std::size_t d) const;
  void learn(double y);
  void begin_fits();
  bool fits_done(int slice);
  void plan_banks();
  void build_banks();
  void find_threshold(std::size_t d);
  bool watch(double y, bool hold);
  void raise(std::size_t d);
  bool follow_raised();
  bool follow_confirmed(double y);
  void close(AlertStage stage);
  void re_reference();

  TailSettings settings_;
  std::array<TailBank, 2> bank_;
  std::array<NuFit, 2> fit_;
  Recovery recovery_;
  TailState state_;
};

}  // namespace tailweir::detect

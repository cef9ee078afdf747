// Thresholds by simulation, in pieces: for the background at start-up and when nu0 has moved, and
// for the tools that made the shipped tables.
//
// Quiet data y = ln(p F(p, nu)), scale 1; the filters run 300 samples, the sums start at 0, and the
// largest statistic of the next T = 5000 samples is kept. Of R such chains h is the e^(-T/ARL)
// quantile. Chain k depends on (seed, k) alone: pieces of any size give the same threshold, so that
// replays agree. Standard error of h at R = 300 about .07 (tail), and falls as 1/sqrt(R). Thread
// rule: one owner; several may run in different threads.
#pragma once

#include <cstdint>
#include <vector>

#include "core/detect/tail_bank.h"

namespace tailweir::detect {

inline constexpr std::uint64_t kCalibrationSeed = 20;
inline constexpr int kCalibrationLength = 5000;

// e^(-length/mean_samples) quantile of the chains' maxima, with its standard error (order
// statistics). maxima: any order, at least 20.
struct Threshold {
  double value = 0, standard_error = 0;
};
Threshold threshold_of(std::vector<double> maxima, double mean_samples);

class TailCalibration {
 public:
  TailCalibration(double channels, double nu, TailDirection direction,
                  std::uint64_t seed = kCalibrationSeed);
  // Runs `chains` more; each about 6 ms.
  void run(int chains);
  int chains() const { return static_cast<int>(maxima_.size()); }
  Threshold threshold(double mean_samples) const { return threshold_of(maxima_, mean_samples); }

 private:
  double channels_, nu_;
  TailBank bank_;
  std::uint64_t seed_;
  std::vector<double> maxima_;
};

// How often a raise really happens on simulated quiet data at a threshold: for the report.
struct AchievedRate {
  std::int64_t samples = 0, raises = 0;
  double mean_samples() const {  // lower bound by one raise when there was none
    return static_cast<double>(samples) / static_cast<double>(raises > 0 ? raises : 1);
  }
};
AchievedRate achieved_tail_rate(double channels, double nu, TailDirection direction,
                                double threshold, std::int64_t samples, std::uint64_t seed);

}  // namespace tailweir::detect

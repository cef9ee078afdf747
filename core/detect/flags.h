// Flags: one calibrated number a sample, and the channels behind it.
//
// Per sample three p-values and what they make together:
//   joint    P(D >= distance): the mixed F until the running fit is ready, then the running fit
//   channel  the smallest channel p-value, Bonferroni-corrected (1 where none can reach the rate)
//   rank     (1 + #{past >= D})/(K + 1), free of any distribution, shown beside the joint one
//   combined min(1, 2 min(joint, channel)), which is what the rates are compared with.
// A joint test alone cannot see one bad channel of many. Combined is at most nominal and close to
// it. Severity at two rates; the expected number of false flags is kept beside the count, and rates
// may change at any time without a refit. Flags never withhold a sample from the estimates; the
// gate does, only when its rate is set, and it counts what it withheld.
//
// Cost a sample: O(p) and one or two incomplete beta functions; no allocation after construction.
// Thread rule: one owner. Formulas and sources: mixed_tail.h, running_fit.h, channel_test.h.
#pragma once

#include <cstdint>
#include <vector>

#include "core/detect/channel_test.h"
#include "core/detect/mixed_tail.h"
#include "core/detect/running_fit.h"

namespace tailweir::detect {

enum class FlagLevel { usual = 0, unusual = 1, severe = 2 };

struct FlagRates {
  double unusual = 1e-3;  // in (0, 1)
  double severe = 1e-4;   // in (0, unusual]
  double gate = 0;        // samples rarer than this are not absorbed; 0: no gate
};

struct FlagScore {
  double joint = 1, channel = 1, rank = 1, combined = 1;
  bool fitted = false;  // joint came from the running fit
  FlagLevel level = FlagLevel::usual;
  bool absorb = true;  // false: the gate asks that the sample be kept out of the estimates
};

struct FlagCounts {
  std::int64_t scored = 0;
  std::int64_t unusual = 0, severe = 0;  // severe ones are counted in both
  std::int64_t gated = 0;
  double expected_unusual = 0, expected_severe = 0, expected_gated = 0;
};

// Plain state, to be stored and restored as it is.
struct FlagState {
  RunningFitState fit;
  FlagCounts counts;
};

class Flags {
 public:
  // channels p >= 1; channels_tested: whether the channel test takes part (otherwise combined is
  // the joint p-value).
  Flags(Index channels, const FlagRates& rates, const RunningFitSettings& fit = {},
        bool channels_tested = true);

  // Scores one sample before it is absorbed. A sample with missing channels is scored on what was
  // observed, by the mixed F of its own size, and leaves the running fit alone. `remember` false
  // (repeated or stale channels): scored, but not remembered by the running fit. A distance that is
  // not finite scores 0 (severe).
  FlagScore score(const ScoredSample& sample, const ScatterKnowledge& known, bool remember = true);

  // Channels of the last scored sample, largest residual first.
  void attribute(const ScoredSample& sample, const ScatterKnowledge& known, Index count,
                 std::vector<ChannelPart>& parts) {
    test_.attribute(sample, known, count, parts);
  }
  ChannelTest& test() { return test_; }

  // From the next sample on. The expected counts go on from what they are.
  void set_rates(const FlagRates& rates) { rates_ = rates; }
  const FlagRates& rates() const { return rates_; }
  const FlagCounts& counts() const { return counts_; }
  const RunningFit& fit() const { return fit_; }

  FlagState state() const { return {fit_.state(), counts_}; }
  void restore(const FlagState& state);

 private:
  double joint(const ScoredSample& sample, const ScatterKnowledge& known, bool whole);

  Index channels_;
  FlagRates rates_;
  bool channels_tested_;
  RunningFit fit_;
  ChannelTest test_;
  PredictiveTail tail_;
  FlagCounts counts_;
};

}  // namespace tailweir::detect

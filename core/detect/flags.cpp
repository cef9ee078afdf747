#include "core/detect/flags.h"

#include <algorithm>
#include <cassert>
#include <cmath>

#include "core/student/student.h"

namespace tailweir::detect {

Flags::Flags(Index channels, const FlagRates& rates, const RunningFitSettings& fit,
             bool channels_tested)
    : channels_(channels),
      rates_(rates),
      channels_tested_(channels_tested && channels > 1),
      fit_(static_cast<double>(channels), fit),
      test_(channels) {
  assert(rates.unusual > 0 && rates.severe <= rates.unusual);
}

double Flags::joint(const ScoredSample& sample, const ScatterKnowledge& known, bool whole) {
  if (whole && fit_.ready()) return fit_.p_value(sample.distance);
  const double p = static_cast<double>(sample.q.size());
  if (!std::isfinite(known.samples)) {
    return student::tail_probability(sample.distance, p, known.nu);
  }
  if (!whole) {
    return PredictiveTail(p, known.samples, known.nu, known.centre_estimated)
        .exact(sample.distance);
  }
  if (!tail_.same(p, known.samples, known.nu, known.centre_estimated)) {
    tail_ = PredictiveTail(p, known.samples, known.nu, known.centre_estimated);
  }
  return tail_.p_value(sample.distance);
}

FlagScore Flags::score(const ScoredSample& sample, const ScatterKnowledge& known, bool remember) {
  FlagScore score;
  const bool whole = sample.q.size() == channels_;
  score.fitted = whole && fit_.ready();
  if (!std::isfinite(sample.distance)) {
    score.joint = score.channel = score.rank = score.combined = 0;
  } else {
    const double joint_tail = joint(sample, known, whole);
    // No degrees of freedom left (fewer samples than channels): nothing can be said.
    score.joint = std::isnan(joint_tail) ? 1 : joint_tail;
    const double largest = std::max({rates_.unusual, rates_.gate, 1e-12});
    score.channel = channels_tested_ ? test_.smallest(sample, known, .5 * largest) : 1;
    score.rank = whole ? fit_.rank_p_value(sample.distance) : score.joint;
    score.combined =
        channels_tested_ ? std::min(1., 2 * std::min(score.joint, score.channel)) : score.joint;
    if (remember && whole) fit_.push(sample.distance);
  }
  score.level = score.combined <= rates_.severe    ? FlagLevel::severe
                : score.combined <= rates_.unusual ? FlagLevel::unusual
                                                   : FlagLevel::usual;
  score.absorb = !(score.combined <= rates_.gate) || !(rates_.gate > 0);
  ++counts_.scored;
  counts_.unusual += score.level != FlagLevel::usual;
  counts_.severe += score.level == FlagLevel::severe;
  counts_.gated += !score.absorb;
  counts_.expected_unusual += rates_.unusual;
  counts_.expected_severe += rates_.severe;
  counts_.expected_gated += rates_.gate;
  return score;
}

void Flags::restore(const FlagState& state) {
  fit_.restore(state.fit);
  counts_ = state.counts;
}

}  // namespace tailweir::detect

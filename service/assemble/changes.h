// Levels to changes: what a channel's values become before they enter a panel.
//
// change: scale * value. level: scale * step(value, last value), where the first value of a channel
// only sets the base:
//   log_difference       ln(x_t/x_(t-1)), levels > 0
//   difference           x_t - x_(t-1)
//   relative_difference  x_t/x_(t-1) - 1, last level not 0
// A missing level leaves the base as it is: the next change spans the gap. Pure: look() computes,
// take() remembers; nothing is kept when a sample is refused. Thread rule: one owner.
#pragma once

#include <vector>

#include "core/result.h"
#include "service/settings/settings.h"

namespace tailweir {

class Changes {
 public:
  explicit Changes(const std::vector<ChannelSettings>& channels);

  // changes of a sample of levels and changes (one per channel, NaN missing), NaN where there is
  // none. Fault: a level that its step cannot take.
  Result<std::vector<double>> look(const std::vector<double>& values) const;
  // Makes the sample's levels the base of the next.
  void take(const std::vector<double>& values);

  // True when the last look() had a channel without a base yet.
  bool lacks_base(const std::vector<double>& values) const;

 private:
  std::vector<ChannelSettings> channels_;
  std::vector<double> base_;  // NaN before the first level
};

}  // namespace tailweir

// Levels to changes: what a sender gives per channel becomes what the panels estimate.
//
//   log_difference       scale * ln(x_t / x_{t-1})
//   difference           scale * (x_t - x_{t-1})
//   relative_difference  scale * (x_t - x_{t-1}) / x_{t-1}
//   enters as change     scale * x_t
//
// The first level of a channel only sets its base and gives no change. A level that has a logarithm
// or a ratio taken of it must be above 0. Checking and committing are apart, so that a sample
// refused on any ground leaves the bases alone. Thread rule: one owner. No I/O, no clock.
#pragma once

#include <cstddef>
#include <optional>
#include <string>
#include <vector>

#include "service/settings/settings.h"

namespace tailweir {

// Magnitudes accepted, of values as given and of changes: their squares and the products of two
// stay representable. 0 is accepted too.
constexpr double kLargestValue = 1e150;
constexpr double kSmallestValue = 1e-150;
bool in_range(double value);

class ChangeAssembler {
 public:
  enum class Trouble { none, not_positive, out_of_range };

  explicit ChangeAssembler(const std::vector<ChannelSettings>& channels);

  // changes[i] <- change of channel i from values[i] (one per channel, finite), NaN while the
  // channel has no base. State unchanged. On trouble, `channel` is the first at fault and changes
  // are unspecified. O(channels), no allocation once changes has its size.
  Trouble preview(const std::vector<double>& values, std::vector<double>& changes,
                  std::size_t& channel) const;

  // Makes the values the next bases. Precondition: preview() of them had no trouble.
  void commit(const std::vector<double>& values);

 private:
  struct Rule {
    EntersAs enters_as;
    Step step;
    double scale;
  };
  std::vector<Rule> rules_;
  std::vector<double> bases_;  // last level, NaN before the first
};

}  // namespace tailweir

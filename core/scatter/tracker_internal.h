// Constants and small helpers that the tracker's files share; not part of its interface.
#pragma once

#include <Eigen/Core>
#include <cmath>
#include <limits>

#include "core/scatter/ring.h"
#include "core/settings.h"

namespace tailweir::tracker_internal {

inline constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();
// A scaled sample beyond this enters at this size in the same direction: u(d) x x' no longer
// depends on the length there (relative difference nu/d), and nothing overflows.
inline constexpr double kAbsurd = 1e30;
// Condition number (scaled channels) beyond which a scatter is not published.
inline constexpr double kWorstCondition = 1e12;
// Whole iterations allowed at one sample: in exact mode, otherwise.
inline constexpr int kExactIterations = 80;
inline constexpr int kIterations = 3;
// Samples a half-life keeps by default: 2 n_eff = 4/ln 2 half-lives.
inline constexpr double kKeptHalfLives = 5.7707801635558535;
// Work (multiply-adds) up to which a polish is done at one sample: under a millisecond.
inline constexpr double kOneGo = 8e6;
// Share of the statistical error below which a tolerance means exact at every sample.
inline constexpr double kExactShare = .02;

inline bool is_half_life(Memory::Kind kind) {
  return kind == Memory::Kind::half_life_samples || kind == Memory::Kind::half_life_time;
}

inline double error_for(double p, double nu, double n) {
  const double sigma1 = (p + nu + 2) / (p + nu);
  const double sigma2 = 2 * (p + nu + 2) / (nu * (p + nu));
  return std::sqrt((sigma1 * p * (p + 1) + sigma2 * p) / n);
}

// What the first iteration after some drift leaves of the distance (tests/bench, drift table).
inline double first_contraction(double p, bool half_life) {
  return (half_life ? .65 : 1.) / (6 + p / 11);
}

// a <- a + scale f C C' on the missing entries, lower triangle.
inline void add_conditional(const PartialSample& partial, double scale, Eigen::MatrixXd& a) {
  const Eigen::MatrixXd part = scale * partial.f * partial.factor * partial.factor.transpose();
  const Index m = static_cast<Index>(partial.missing.size());
  for (Index k = 0; k < m; ++k) {
    for (Index l = k; l < m; ++l) {  // missing rises: (l, k) is in the lower triangle
      a(partial.missing[static_cast<std::size_t>(l)],
        partial.missing[static_cast<std::size_t>(k)]) += part(l, k);
    }
  }
}

}  // namespace tailweir::tracker_internal

// Samples with missing entries, sorted by pattern and scaled: what missing.cpp iterates on.
//
// Channels are divided by a power of two near their median absolute deviation from the centre (or
// from the median when the centre is estimated), which loses no digit. With an estimated centre a
// constant 1 is row 0 (Kent, Tyler & Vardi, 1994). Internal to the missing-entries fit. Thread
// rule: plain values.
#pragma once

#include <Eigen/Core>
#include <vector>

#include "core/scatter/missing.h"

namespace tailweir {

// Samples that miss the same channels.
struct MissingPattern {
  std::vector<Index> missing;  // rows of MissingData::x, rising; may be empty
  Index first = 0, count = 0;  // its columns in MissingData::x
  double mass = 0;             // of its samples, whole sum over patterns 1
};

struct MissingData {
  Index channels = 0, lift = 0;
  Eigen::VectorXd offset, unit;
  Eigen::MatrixXd x;         // (p + lift) x used samples, zero where missing
  Eigen::ArrayXd mass;       // sum 1
  Eigen::ArrayXd observed;   // |o| of each column
  std::vector<Index> order;  // column of x -> column of the caller
  std::vector<MissingPattern> patterns;
  double log_unit = 0;  // sum of ln unit
};

// Sorts and scales; sets fit.coverage, fit.observed and, when the samples cannot determine a
// scatter, fit.reason (false).
bool prepare_missing(const Eigen::Ref<const Eigen::MatrixXd>& samples,
                     const Eigen::Ref<const Eigen::ArrayXd>& mass, const MissingSettings& settings,
                     MissingData& data, MissingFit& fit);

}  // namespace tailweir

// The shipped thresholds: grid and layout. Values: thresholds_table.cpp, which names the command
// that made it. Thread rule: constants.
#pragma once

#include <array>

namespace tailweir::detect {

struct ThresholdPair {
  double at_5000, at_25000;  // mean samples between false alerts
};

inline constexpr std::array<double, 8> kTableChannels{1, 2, 4, 10, 20, 50, 100, 300};
inline constexpr std::array<double, 7> kTableNu{1.5, 3, 5, 8, 15, 30, 60};

// [heavier, lighter][channels][nu of the base]
extern const ThresholdPair kTailTable[2][kTableChannels.size()][kTableNu.size()];
// [up, down][channels][nu]
extern const ThresholdPair kScaleTable[2][kTableChannels.size()][kTableNu.size()];
extern const ThresholdPair kShapeTable[kTableChannels.size()];

}  // namespace tailweir::detect

#include "core/detect/thresholds.h"

#include <algorithm>
#include <cmath>

#include "core/detect/thresholds_table.h"

namespace tailweir::detect {

namespace {

// Where x lies among the knots, in logarithms: cell and share, held at the edges.
template <std::size_t kCount>
std::pair<std::size_t, double> place(const std::array<double, kCount>& knots, double x) {
  const double held = std::clamp(x, knots.front(), knots.back());
  std::size_t cell = 0;
  while (cell + 2 < kCount && held >= knots[cell + 1]) ++cell;
  return {cell, std::log(held / knots[cell]) / std::log(knots[cell + 1] / knots[cell])};
}

double at_length(const ThresholdPair& pair, double mean_samples) {
  const double slope = (pair.at_25000 - pair.at_5000) / std::log(5.);
  return std::max(.1, pair.at_5000 + slope * std::log(mean_samples / 5000));
}

double interpolate(const ThresholdPair (&table)[kTableChannels.size()][kTableNu.size()],
                   double channels, double nu, double mean_samples) {
  const auto [i, s] = place(kTableChannels, channels);
  const auto [j, r] = place(kTableNu, nu);
  const auto value = [&](std::size_t a, std::size_t b) {
    return at_length(table[a][b], mean_samples);
  };
  return (1 - s) * ((1 - r) * value(i, j) + r * value(i, j + 1)) +
         s * ((1 - r) * value(i + 1, j) + r * value(i + 1, j + 1));
}

}  // namespace

double tail_threshold(double channels, double nu, TailDirection direction, double mean_samples) {
  return interpolate(kTailTable[static_cast<std::size_t>(direction)], channels, nu, mean_samples);
}

double scale_threshold(double channels, double nu, bool up, double mean_samples) {
  return interpolate(kScaleTable[up ? 0 : 1], channels, nu, mean_samples);
}

double shape_threshold(double channels, double mean_samples) {
  const auto [i, s] = place(kTableChannels, channels);
  return (1 - s) * at_length(kShapeTable[i], mean_samples) +
         s * at_length(kShapeTable[i + 1], mean_samples);
}

}  // namespace tailweir::detect

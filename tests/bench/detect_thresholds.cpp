// Makes core/detect/thresholds_table.cpp: detect_thresholds [chains] >
// core/detect/thresholds_table.cpp
//
// Tail: calibration.h at every grid point and direction. Scale: exact, by Markov chain. Shape: the
// monitor itself on directions uniform on the sphere. Two columns each, at 5000 and 25000 samples.
#include <algorithm>
#include <array>
#include <cmath>
#include <cstdio>
#include <cstdlib>
#include <vector>

#include "core/detect/calibration.h"
#include "core/detect/cusum_chain.h"
#include "core/detect/random.h"
#include "core/detect/scale_monitor.h"
#include "core/detect/shape_monitor.h"
#include "core/detect/thresholds_table.h"

using namespace tailweir::detect;

namespace {

std::vector<double> shape_maxima(int p, int chains) {
  std::vector<double> maxima;
  for (int chain = 0; chain < chains; ++chain) {
    CounterRandom random(kCalibrationSeed, static_cast<std::uint64_t>(chain));
    ShapeSettings settings;
    settings.channels = p;
    settings.threshold = 1e9;
    ShapeMonitor monitor(settings);
    Eigen::VectorXd x(p);
    const int warm = 60 * p;  // R needs its own memory
    double largest = 0;
    for (int t = 0; t < warm + kCalibrationLength; ++t) {
      for (int j = 0; j < p; ++j) x[j] = random.normal();
      monitor.push(x);
      if (t >= warm) largest = std::max(largest, monitor.statistic());
    }
    maxima.push_back(largest);
  }
  return maxima;
}

void print_pair(double first, double second) { std::printf("{%.3f, %.3f}", first, second); }

}  // namespace

int main(int count, char** values) {
  const int chains = count > 1 ? std::atoi(values[1]) : 1000;
  std::printf("// Made by: detect_thresholds %d\n#include \"core/detect/thresholds_table.h\"\n\n",
              chains);
  std::printf(
      "namespace tailweir::detect {\n\n// [direction][channels][nu]{at 5000, at 25000 samples}\n");
  std::printf("const ThresholdPair kTailTable[2][kTableChannels.size()][kTableNu.size()] = {\n");
  for (TailDirection direction : {TailDirection::heavier, TailDirection::lighter}) {
    std::printf("    {\n");
    for (double p : kTableChannels) {
      std::printf("        {");
      for (double nu : kTableNu) {
        TailCalibration calibration(p, nu, direction);
        calibration.run(chains);
        print_pair(calibration.threshold(5000).value, calibration.threshold(25000).value);
        std::printf("%s", nu == kTableNu.back() ? "},\n" : ", ");
      }
    }
    std::printf("    },\n");
  }
  std::printf(
      "};\n\nconst ThresholdPair kScaleTable[2][kTableChannels.size()][kTableNu.size()] = {\n");
  for (double a : {kScaleShift, -kScaleShift}) {
    std::printf("    {\n");
    for (double p : kTableChannels) {
      std::printf("        {");
      for (double nu : kTableNu) {
        const auto below = [&](double z) { return scale_increment_below(z, p, nu, a); };
        print_pair(cusum_threshold(below, 5000, 200), cusum_threshold(below, 25000, 200));
        std::printf("%s", nu == kTableNu.back() ? "},\n" : ", ");
      }
    }
    std::printf("    },\n");
  }
  std::printf("};\n\nconst ThresholdPair kShapeTable[kTableChannels.size()] = {\n    ");
  for (double p : kTableChannels) {
    const int dimension = std::max(2, static_cast<int>(p));
    const int runs = std::max(60, static_cast<int>(std::min<double>(chains, 8 * chains / p)));
    const std::vector<double> maxima = shape_maxima(dimension, runs);
    print_pair(threshold_of(maxima, 5000).value, threshold_of(maxima, 25000).value);
    std::printf("%s", p == kTableChannels.back() ? "" : ", ");
  }
  std::printf("};\n\n}  // namespace tailweir::detect\n");
}

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <vector>

#include "core/detect/calibration.h"
#include "core/detect/cusum_chain.h"
#include "core/detect/random.h"
#include "core/detect/scale_monitor.h"
#include "core/detect/thresholds.h"
#include "core/student/student.h"

namespace tailweir::detect {
namespace {

double normal_below(double z) { return .5 * std::erfc(-z / std::sqrt(2.)); }

double one_sided(double reference, double h, double shift) {
  return cusum_run_length([&](double z) { return normal_below(z + reference - shift); }, h, 200);
}

// Cited value: two-sided CUSUM run lengths of the handbook tables (k = .5), combined from the two
// one-sided ones by 1/ARL = 1/ARL+ + 1/ARL-. Tolerance: the digits printed.
TEST(CusumChain, HandbookRunLengths) {
  const double four[][2] = {{0, 167.68379}, {.5, 26.630203}, {1, 8.3831319}, {2, 3.3427701}};
  const double five[][2] = {{0, 465.44351}, {.5, 37.996143}, {1, 10.375970}, {2, 4.0088711}};
  const auto two_sided = [](double h, double shift) {
    return 1 / (1 / one_sided(.5, h, shift) + 1 / one_sided(.5, h, -shift));
  };
  for (const auto& row : four) EXPECT_NEAR(two_sided(4, row[0]) / row[1], 1, 3e-7) << row[0];
  for (const auto& row : five) EXPECT_NEAR(two_sided(5, row[0]) / row[1], 1, 3e-7) << row[0];
  EXPECT_NEAR(one_sided(.5, 4, 0), 335.36758, 1e-4);
  EXPECT_NEAR(one_sided(.5, 5, 0), 930.88701, 3e-4);
}

// Cited value: Hawkins' pairs (k, h) for a two-sided run length of 370; h is printed to two digits,
// a change of .005 in h moves the run length by up to 1.2%.
TEST(CusumChain, HawkinsPairs) {
  const double pairs[][2] = {{.25, 8.01}, {.5, 4.77}, {.75, 3.34}, {1, 2.52}};
  for (const auto& pair : pairs) {
    EXPECT_NEAR(.5 * one_sided(pair[0], pair[1], 0), 370, 5) << pair[0];
  }
}

// Statistical: mean of 4000 run lengths, standard error 168/sqrt(4000) = 2.7 (run lengths are
// nearly exponential); five standard errors, false failure 6e-7.
TEST(CusumChain, HandbookRunLengthBySimulation) {
  CounterRandom random(5, 0);
  double total = 0;
  const int runs = 4000;
  for (int run = 0; run < runs; ++run) {
    double up = 0, down = 0;
    int t = 0;
    while (up <= 4 && down <= 4) {
      const double z = random.normal();
      up = std::max(0., up) + z - .5;
      down = std::max(0., down) - z - .5;
      ++t;
    }
    total += t;
  }
  EXPECT_NEAR(total / runs, 167.68379, 5 * 167.7 / std::sqrt(static_cast<double>(runs)));
}

TEST(CusumChain, ThresholdInvertsRunLength) {
  const auto below = [](double z) { return normal_below(z + .5); };
  EXPECT_NEAR(cusum_threshold(below, 335.36758), 4, 2e-5);
  EXPECT_NEAR(cusum_threshold(below, 930.88701), 5, 2e-5);
}

// Cited values: thresholds at run length 5000, up and down, known scatter.
TEST(CusumChain, ScaleThresholds) {
  const auto exact = [](double p, double nu, double a) {
    return cusum_threshold([&](double z) { return scale_increment_below(z, p, nu, a); }, 5000, 200);
  };
  EXPECT_NEAR(exact(20, 8, kScaleShift), 6.983, 6e-4);
  EXPECT_NEAR(exact(20, 8, -kScaleShift), 6.785, 6e-4);
  EXPECT_NEAR(exact(4, 5, kScaleShift), 6.447, 6e-4);
  EXPECT_NEAR(exact(4, 5, -kScaleShift), 6.487, 6e-4);
  EXPECT_NEAR(scale_threshold(20, 8, true, 5000), 6.983, 2e-3);
  EXPECT_NEAR(scale_threshold(4, 5, false, 5000), 6.487, 2e-3);
}

// The plain ratio lf(y; p, new) - lf(y; p, old) is not monotone in y: its distribution is tabulated
// and sorted. Reading between the points of the table is linear.
class TabulatedIncrement {
 public:
  TabulatedIncrement(double p, double old_nu, double new_nu, double cap) {
    constexpr int points = 400000;
    const double low = std::log(p) - 14, high = std::log(p) + 60, step = (high - low) / points;
    for (int i = 0; i < points; ++i) {
      const double y = low + step * (i + .5);
      const double density = student::log_density_of_log_distance(y, p, old_nu);
      const double z = student::log_density_of_log_distance(y, p, new_nu) - density;
      points_.push_back({std::min(cap, z), std::exp(density) * step});
    }
    std::sort(points_.begin(), points_.end());
    double mass = 0;
    for (auto& point : points_) {
      mass += point.second;
      point.second = mass;
    }
  }
  double operator()(double z) const {
    const auto after = std::upper_bound(points_.begin(), points_.end(), std::pair(z, 2.));
    if (after == points_.begin()) return 0;
    return std::min(1., std::prev(after)->second / points_.back().second);
  }

 private:
  std::vector<std::pair<double, double>> points_;
};

// Cited values: plain ratio charts at run length 5000. The table's steps limit the digits.
TEST(CusumChain, PlainTailRatioThresholds) {
  const auto exact = [](double p, double new_nu, double cap) {
    const TabulatedIncrement below(p, 8, new_nu, cap);
    return cusum_threshold([&](double z) { return below(z); }, 5000, 400);
  };
  EXPECT_NEAR(exact(4, 4, 1e9), 4.539, 5e-3);
  EXPECT_NEAR(exact(4, 4, 1), 3.297, 2e-2);  // an atom at the cap
  EXPECT_NEAR(exact(4, 16, 1e9), 4.319, 5e-3);
  EXPECT_NEAR(exact(20, 4, 1e9), 5.230, 5e-3);
  EXPECT_NEAR(exact(20, 4, 1), 3.790, 2e-2);
  EXPECT_NEAR(exact(20, 16, 1e9), 5.329, 5e-3);
}

// Symmetry: the threshold does not depend on how the work was cut.
TEST(Calibration, PiecesGiveTheSameThreshold) {
  TailCalibration whole(20, 8, TailDirection::heavier), parts(20, 8, TailDirection::heavier);
  whole.run(24);
  parts.run(5);
  parts.run(19);
  EXPECT_EQ(whole.threshold(5000).value, parts.threshold(5000).value);
}

// Statistical: 150 fresh chains against the shipped table, between its knots too; the error of a
// simulated h at 150 chains is about .1, plus the table's own .04 and the interpolation. Fixed
// seed.
TEST(Calibration, ShippedTableAgreesWithFreshSimulation) {
  const struct {
    double p, nu;
    TailDirection direction;
  } cases[] = {{20, 8, TailDirection::heavier},
               {20, 8, TailDirection::lighter},
               {30, 6, TailDirection::heavier},
               {7, 12, TailDirection::lighter}};
  for (const auto& c : cases) {
    TailCalibration fresh(c.p, c.nu, c.direction, 977);
    fresh.run(150);
    const Threshold threshold = fresh.threshold(5000);
    EXPECT_NEAR(tail_threshold(c.p, c.nu, c.direction, 5000), threshold.value,
                .1 + 4 * threshold.standard_error)
        << c.p << " " << c.nu;
  }
}

}  // namespace
}  // namespace tailweir::detect

#include <gtest/gtest.h>

#include <cmath>

#include "core/detect/scale_filter.h"
#include "core/detect/tail_bank.h"
#include "core/detect/tail_reference.h"
#include "core/student/student.h"
#include "tests/core/detect_worlds.h"

namespace tailweir::detect {
namespace {

using detect_test::SampleGenerator;
using detect_test::Volatility;
using detect_test::World;

// Oracle: values worked out from the textbook formula by an independent program (cited value).
TEST(ScaleFilter, BaseDensityOfLogDistance) {
  EXPECT_NEAR(student::log_density_of_log_distance(2, 4, 5), -1.1330123147, 1e-9);
  EXPECT_NEAR(student::log_density_of_log_distance(5, 4, 5), -6.4564575254, 1e-9);
  EXPECT_NEAR(student::log_density_of_log_distance(3, 20, 8), -.4172233398, 1e-9);
}

// Oracle: the formula itself (identity). Tolerance: the error the header states.
TEST(ScaleFilter, TableAgreesWithTheDensity) {
  for (double p : {1., 4., 20., 100., 300.}) {
    for (double nu : {.5, 3., 8., 30., 120.}) {
      const EmissionTable table(p, nu);
      EmissionTable::Points m;
      double peak = 0;
      for (int pass = 0; pass < 2; ++pass) {
        for (double y = std::log(p) - 6; y < std::log(p) + 6; y += .0137) {
          table.emissions(y, m);
          for (int i = 0; i < EmissionTable::kGrid; ++i) {
            const double z = y + EmissionTable::kReach - EmissionTable::kStep * i;
            const double exact =
                .999 * std::exp(student::log_density_of_log_distance(z, p, nu)) + 1e-3 / 60;
            peak = std::max(peak, exact);
            if (pass == 1 && exact > 1e-6 * peak) {
              ASSERT_NEAR(m[i], exact, 1e-3 * exact + 1e-6 * peak) << p << " " << nu << " " << z;
            }
          }
        }
      }
    }
  }
}

// Oracle: independent implementation, p = 4, nu 8 against 4 (cited value).
TEST(ScaleFilter, EvidenceAndPosteriorMeanOfEightSamples) {
  const double y[] = {1, 1.5, .5, 3, 5, 1.2, -2, 4.5};
  const double evidence[] = {-2.105328, -1.273056, -1.273013, -2.889182,
                             -6.279005, -1.961281, -6.334207, -4.938854};
  const double ratio[] = {-.001702, -.140943, -.097002, .442032,
                          1.465724, .537245,  .810816,  .672312};
  const double sum[] = {-.001702, -.140943, -.097002, .442032,
                        1.442032, 1.979277, 2.790093, 3.462405};
  const EmissionTable eight(4, 8), four(4, 4);
  const FilterStep step;
  FilterState a, b;
  double s = 0;
  for (int t = 0; t < 8; ++t) {
    const double base = step(eight, y[t], a);
    const double other = step(four, y[t], b);
    EXPECT_NEAR(base, evidence[t], 2e-6);
    EXPECT_NEAR(other - base, ratio[t], 2e-6);
    s = std::max(0., s) + std::min(1., other - base);
    EXPECT_NEAR(s, sum[t], 5e-6);
  }
  EXPECT_NEAR(a.mean_log_scale(), 1.127263, 2e-6);
  EXPECT_NEAR(b.mean_log_scale(), .465113, 2e-6);
}

// Limit: any finite y leaves a finite evidence and a normalised posterior.
TEST(ScaleFilter, AbsurdDistancesAreUninformative) {
  const EmissionTable table(20, 8);
  const FilterStep step;
  FilterState state;
  SampleGenerator random(1);
  for (int t = 0; t < 200; ++t) step(table, random.log_distance(20, 8), state);
  const double before = state.mean_log_scale();
  for (double y : {-700., 700., -1e300, 1e300}) {
    EXPECT_NEAR(step(table, y, state), std::log(1e-3 / 60), 1e-9);
  }
  EXPECT_NEAR(state.mean_log_scale(), before, .1);
}

// Statistical: SE(ln nu) = .058 at M = 1000 (p 20, nu 8); the bound of 5 SE fails with chance 6e-7.
TEST(TailReference, FindsNuThroughAVolatilityChange) {
  SampleGenerator random(3);
  Volatility volatility(World::sine, 20, 8);
  ValueRing ring(1000);
  for (int t = 0; t < 1000; ++t) ring.push(volatility.log_distance(random, false));
  NuFit fit(20, FilterSettings{});
  double nu = 20;
  for (int pass = 0; pass < 6; ++pass) {
    fit.begin(nu, 0, 1000);
    while (!fit.visit(ring, 100)) {
    }
    nu = fit.nu();
  }
  EXPECT_NEAR(std::log(nu / 8), 0, 5 * .0582);
}

// Cited value: p = 20, nu0 = 8, M = 1000 gives SE .0582 and the guard factor .928.
TEST(TailReference, GuardFactor) {
  const double error = guard_standard_error(20, 8, 1000);
  EXPECT_NEAR(error, .0582, 5e-5);
  EXPECT_NEAR(std::exp(-1.28 * error), .928, 5e-4);
}

TEST(TailReference, RingForgetsItsNewestValues) {
  ValueRing ring(5);
  for (int i = 0; i < 8; ++i) ring.push(i);
  EXPECT_EQ(ring.held(), 5);
  ring.forget_newest(2);
  EXPECT_EQ(ring.held(), 3);
  ring.push(70);
  EXPECT_EQ(ring.at(ring.pushed - 1), 70);
  EXPECT_EQ(ring.at(ring.pushed - 2), 5);
  EXPECT_EQ(ring.held(), 4);
}

}  // namespace
}  // namespace tailweir::detect

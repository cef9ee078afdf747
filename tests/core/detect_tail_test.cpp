#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <string>

#include "core/detect/tail_monitor.h"
#include "core/detect/thresholds.h"
#include "tests/core/detect_worlds.h"

namespace tailweir::detect {
namespace {

using detect_test::kWorlds;
using detect_test::SampleGenerator;
using detect_test::Volatility;
using detect_test::World;

TailSettings known(double p, double nu) {
  TailSettings settings;
  settings.channels = p;
  settings.known_nu = nu;
  return settings;
}

TailSettings learned(double p) {
  TailSettings settings;
  settings.channels = p;
  return settings;
}

// Feeds until the monitor has been armed for 300 samples on end.
template <typename Next>
bool settle(TailMonitor& monitor, Next next) {
  int armed = 0;
  for (int t = 0; t < 8000 && armed < 300; ++t) {
    monitor.push(next());
    armed = monitor.stage() == AlertStage::armed ? armed + 1 : 0;
  }
  return armed >= 300;
}

TEST(TailMonitor, KnownReferenceIsArmedAtOnce) {
  const TailMonitor monitor(known(20, 8));
  EXPECT_EQ(monitor.stage(), AlertStage::armed);
  EXPECT_DOUBLE_EQ(monitor.bank(TailDirection::heavier).base(), 8);
  EXPECT_DOUBLE_EQ(monitor.bank(TailDirection::lighter).base(), 8);
  EXPECT_NEAR(monitor.threshold(TailDirection::heavier),
              tail_threshold(20, 8, TailDirection::heavier, 5000), 1e-12);
}

TEST(TailMonitor, LearnsItsReferenceBeforeItWatches) {
  SampleGenerator random(31);
  TailMonitor monitor(learned(20));
  int t = 0;
  while (monitor.stage() == AlertStage::learning && t < 5000) {
    monitor.push(random.log_distance(20, 8));
    ++t;
  }
  EXPECT_GT(t, 1000);
  EXPECT_LT(t, 1700);
  // Guarded bases either side of nu0; SE at most .06.
  EXPECT_LT(monitor.bank(TailDirection::heavier).base(),
            monitor.reference_nu(TailDirection::heavier));
  EXPECT_GT(monitor.bank(TailDirection::lighter).base(),
            monitor.reference_nu(TailDirection::lighter));
  EXPECT_NEAR(std::log(monitor.reference_nu(TailDirection::heavier) / 8), 0, .3);
}

// Limit: one absurd sample adds at most the cap.
TEST(TailMonitor, ASingleOutlierRaisesNothing) {
  SampleGenerator random(32);
  TailMonitor monitor(known(20, 8));
  for (int t = 0; t < 300; ++t) monitor.push(random.log_distance(20, 8));
  const double before = monitor.bank(TailDirection::heavier).statistic();
  EXPECT_FALSE(monitor.push(std::log(1e12)));
  EXPECT_LE(monitor.bank(TailDirection::heavier).statistic(), std::max(0., before) + 1);
}

TEST(TailMonitor, IgnoresWhatIsNotFinite) {
  TailMonitor monitor(known(4, 8));
  EXPECT_FALSE(monitor.push(std::nan("")));
  EXPECT_FALSE(monitor.push(-INFINITY));
  EXPECT_EQ(monitor.count(), 0);
}

// Statistical: mean delay about 50 over 60 runs, standard deviation of a run about 33: bound at 5.
// The design's own figure (unguarded, known reference) is 49 from steady state.
TEST(StatisticalTailMonitor, RaisesConfirmsAndDatesAHeavierTail) {
  double delay = 0;
  int used = 0, confirmed = 0;
  double dated = 0;
  for (std::uint64_t run = 0; run < 60; ++run) {
    SampleGenerator random(400 + run);
    TailMonitor monitor(known(20, 8));
    for (int t = 0; t < 300; ++t) monitor.push(random.log_distance(20, 8));
    if (monitor.stage() != AlertStage::armed || monitor.alert().id > 0) continue;
    for (int t = 1; t < 2000; ++t) {
      if (!monitor.push(random.log_distance(20, 4))) continue;
      const Alert& alert = monitor.alert();
      if (alert.stage == AlertStage::raised) {
        EXPECT_EQ(alert.direction, AlertDirection::heavier);
        EXPECT_DOUBLE_EQ(alert.from, 8);
        EXPECT_LT(alert.to, 8);
        EXPECT_EQ(alert.wald, 0);
        delay += t;
        dated += static_cast<double>(alert.since - 300);
        ++used;
        continue;
      }
      confirmed += alert.stage == AlertStage::confirmed;
      break;
    }
  }
  ASSERT_GT(used, 45);
  EXPECT_NEAR(delay / used, 50, 5 * 33 / std::sqrt(used));
  EXPECT_NEAR(dated / used, 0, 40);
  EXPECT_GT(confirmed, .75 * used);
}

// Statistical: probability of a raise within 1000 samples, one direction at 5000 nominal: .18 at
// most on paper; 80 runs, bound at the figure plus 4.5 standard errors of .045.
TEST(StatisticalTailMonitor, VolatilityDoesNotRaiseTailAlerts) {
  for (World world : kWorlds) {
    int heavier = 0, lighter = 0, used = 0;
    for (std::uint64_t run = 0; run < 80; ++run) {
      SampleGenerator random(5000 + run);
      Volatility volatility(world, 20, 8);
      TailMonitor monitor(learned(20));
      if (!settle(monitor, [&] { return volatility.log_distance(random, false); })) continue;
      ++used;
      bool up = false, down = false;
      for (int t = 0; t < 1000; ++t) {
        if (monitor.push(volatility.log_distance(random, true)) &&
            monitor.alert().stage == AlertStage::raised) {
          (monitor.alert().direction == AlertDirection::heavier ? up : down) = true;
        }
      }
      heavier += up;
      lighter += down;
    }
    const bool garch = world == World::garch_one || world == World::garch_all;
    const double bound = (garch ? .30 : .20) + 4.5 * .045;
    EXPECT_GE(used, 60);
    EXPECT_LE(heavier, bound * used) << name(world);
    EXPECT_LE(lighter, bound * used) << name(world);
  }
}

// Statistical: at one direction's 5000 nominal with a known reference, 600000 quiet samples expect
// 120 raises a direction, 240 in all; bounds at five standard deviations of the count and of the
// threshold (6% in run length at one standard error). Confirmed: at most 5%, measured 1%.
TEST(StatisticalTailMonitor, FalseRaisesAreAsRareAsAskedAndSeldomConfirmed) {
  SampleGenerator random(71);
  TailMonitor monitor(known(20, 8));
  int raised = 0, confirmed = 0;
  for (int t = 0; t < 600000; ++t) {
    if (!monitor.push(random.log_distance(20, 8))) continue;
    raised += monitor.alert().stage == AlertStage::raised;
    confirmed += monitor.alert().stage == AlertStage::confirmed;
  }
  EXPECT_GT(raised, 120);
  EXPECT_LT(raised, 360);
  EXPECT_LE(confirmed, .05 * raised + 4);
}

TEST(StatisticalTailMonitor, ConfirmedAlertRecoversAfterAReturn) {
  int recovered = 0, used = 0;
  for (std::uint64_t run = 0; run < 30; ++run) {
    SampleGenerator random(900 + run);
    TailMonitor monitor(learned(20));
    if (!settle(monitor, [&] { return random.log_distance(20, 8); })) continue;
    for (int t = 0; t < 250; ++t) monitor.push(random.log_distance(20, 3));
    if (monitor.stage() != AlertStage::confirmed) continue;
    ++used;
    bool gone = false;
    for (int t = 0; t < 245 && !gone; ++t) {
      gone = monitor.push(random.log_distance(20, 8)) &&
             monitor.alert().stage == AlertStage::recovered;
    }
    recovered += gone;
  }
  ASSERT_GE(used, 20);
  EXPECT_GE(recovered, .8 * used);
}

TEST(TailMonitor, AChangeThatStaysBecomesTheReference) {
  SampleGenerator random(77);
  TailMonitor monitor(learned(20));
  ASSERT_TRUE(settle(monitor, [&] { return random.log_distance(20, 8); }));
  int t = 0;
  while (t < 3000 && monitor.alert().stage != AlertStage::re_referenced) {
    monitor.push(random.log_distance(20, 3));
    ++t;
  }
  ASSERT_EQ(monitor.alert().stage, AlertStage::re_referenced);
  EXPECT_NEAR(std::log(monitor.alert().to / 3), 0, .5);
  ASSERT_EQ(monitor.stage(), AlertStage::learning);
  for (t = 0; t < 600 && monitor.stage() == AlertStage::learning; ++t) {
    monitor.push(random.log_distance(20, 3));
  }
  EXPECT_EQ(monitor.stage(), AlertStage::armed);
  EXPECT_NEAR(std::log(monitor.reference_nu(TailDirection::heavier) / 3), 0, .3);
}

TEST(TailMonitor, DismissedSamplesGoBackIntoTheReference) {
  SampleGenerator random(79);
  TailSettings settings = learned(20);
  settings.mean_samples_heavier = settings.mean_samples_lighter = 100;  // raises often
  TailMonitor monitor(settings);
  int dismissed = 0;
  std::int64_t fed = 0;
  for (; fed < 6000 && dismissed < 3; ++fed) {
    dismissed +=
        monitor.push(random.log_distance(20, 8)) && monitor.alert().stage == AlertStage::dismissed;
  }
  ASSERT_GE(dismissed, 3);
  // Nothing was lost but what confirmed alerts kept; none was confirmed here.
  EXPECT_EQ(monitor.state().reference.pushed, fed);
}

// Identity: a restored copy goes on exactly like the original, in every stage.
TEST(TailMonitor, StateRestores) {
  SampleGenerator random(83);
  TailMonitor monitor(learned(4));
  for (int t = 0; t < 6000; ++t) {
    const double y = random.log_distance(4, t < 3000 ? 12 : t < 3400 ? 2 : 12);
    monitor.push(y);
    if (t % 487 != 486) continue;
    TailMonitor copy(learned(4));
    copy.restore(monitor.state());
    SampleGenerator ahead(84);
    TailMonitor original = monitor;
    for (int k = 0; k < 300; ++k) {
      const double next = ahead.log_distance(4, 3);
      ASSERT_EQ(original.push(next), copy.push(next)) << t << " " << k;
      ASSERT_EQ(original.bank(TailDirection::heavier).statistic(),
                copy.bank(TailDirection::heavier).statistic());
      ASSERT_EQ(original.stage(), copy.stage());
    }
  }
}

TEST(TailMonitor, SimulatedThresholdHoldsNearItsNu) {
  TailMonitor monitor(known(20, 8));
  monitor.set_threshold(TailDirection::heavier, 8.2, 9);
  const double moved = tail_threshold(20, 8.2, TailDirection::heavier, 5000) -
                       tail_threshold(20, 8, TailDirection::heavier, 5000);
  EXPECT_NEAR(monitor.threshold(TailDirection::heavier), 9 - moved, 1e-12);
  monitor.set_threshold(TailDirection::heavier, 16, 9);
  EXPECT_NEAR(monitor.threshold(TailDirection::heavier),
              tail_threshold(20, 8, TailDirection::heavier, 5000), 1e-12);
}

}  // namespace
}  // namespace tailweir::detect

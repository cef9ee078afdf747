#include <gtest/gtest.h>

#include <Eigen/Cholesky>
#include <algorithm>
#include <cmath>

#include "core/detect/alerts.h"
#include "tests/core/detect_worlds.h"

namespace tailweir::detect {
namespace {

using detect_test::SampleGenerator;

// x ~ t_p(0, equicorrelation rho, nu).
void draw(SampleGenerator& random, double nu, double rho, Eigen::VectorXd& x) {
  const double root = std::sqrt(nu / random.chi_square(nu));
  const double common = std::sqrt(rho) * random.normal();
  for (double& value : x) value = root * (std::sqrt(1 - rho) * random.normal() + common);
}

// Oracle: an independent program's threshold for a per-sample chart with a known reference,
// 1.339 (p 20) and 3.35 (p 4) at run length 5000. Statistical: 400000 samples expect 80 raises;
// five standard deviations of 9, doubled for the clustering of excursions.
TEST(StatisticalShapeMonitor, KnownReferenceRunLength) {
  const double cases[][2] = {{20, 1.339}, {4, 3.35}};
  for (const auto& c : cases) {
    ShapeSettings settings;
    settings.channels = static_cast<Index>(c[0]);
    settings.reference_ratio = 0;
    settings.batch = 1;
    settings.threshold = 1e9;
    ShapeMonitor monitor(settings);
    SampleGenerator random(3);
    Eigen::VectorXd x(settings.channels);
    // A raise is an excursion above h after a restart: the chart forgets within 5p samples.
    int raises = 0, quiet = 0;
    for (int t = 0; t < 400000; ++t) {
      for (double& value : x) value = random.normal();
      monitor.push(x);
      if (quiet > 0) {
        --quiet;
      } else if (t > 2000 && monitor.statistic() > c[1]) {
        ++raises;
        quiet = static_cast<int>(8 * c[0]);
      }
    }
    EXPECT_NEAR(raises, 80, 55) << c[0];
  }
}

// Limit: Q averages 1 on quiet data, also with a reference estimated from few samples.
TEST(ShapeMonitor, QuietStatisticAveragesOne) {
  const Index p = 10;
  SampleGenerator random(4);
  Eigen::VectorXd x(p);
  Eigen::MatrixXd rough = Eigen::MatrixXd::Zero(p, p);
  for (int i = 0; i < 50; ++i) {
    for (double& value : x) value = random.normal();
    rough += x * x.transpose() / 50;
  }
  ShapeSettings settings;
  settings.channels = p;
  settings.threshold = 1e9;
  ShapeMonitor monitor(settings);
  ASSERT_TRUE(monitor.set_reference(rough));
  double sum = 0;
  int count = 0;
  for (int t = 0; t < 60000; ++t) {
    draw(random, 5, 0, x);
    monitor.push(x);
    if (t < 5000) continue;
    sum += monitor.statistic();
    ++count;
  }
  // Whitening by a rough scatter leaves directions that are not quite uniform: within 15%.
  EXPECT_NEAR(sum / count, 1, .15);
}

TEST(ShapeMonitor, RefusesAReferenceThatIsNotPositiveDefinite) {
  ShapeSettings settings;
  settings.channels = 3;
  ShapeMonitor monitor(settings);
  EXPECT_FALSE(monitor.set_reference(Eigen::MatrixXd::Ones(3, 3)));
}

TEST(ShapeMonitor, NamesTheWorstPairInChannelUnits) {
  const Index p = 8;
  SampleGenerator random(5);
  Eigen::MatrixXd s = Eigen::MatrixXd::Constant(p, p, .4);
  s.diagonal().setOnes();
  const Eigen::VectorXd scale = Eigen::VectorXd::LinSpaced(p, .1, 10);
  s = scale.asDiagonal() * s * scale.asDiagonal();
  ShapeSettings settings;
  settings.channels = p;
  settings.memory = 20;  // one pair of 28 needs a longer look
  settings.threshold = 2.3;
  ShapeMonitor monitor(settings);
  ASSERT_TRUE(monitor.set_reference(s));
  const Eigen::MatrixXd quiet = s.llt().matrixL();
  Eigen::MatrixXd moved = s;
  moved(2, 6) = moved(6, 2) = .9 * scale[2] * scale[6];
  moved = moved.llt().matrixL();
  Eigen::VectorXd z(p), x(p);
  for (int t = 0; t < 3000; ++t) {
    draw(random, 6, 0, z);
    x = quiet * z;
    monitor.push(x);
  }
  ASSERT_EQ(monitor.stage(), AlertStage::armed);
  bool settled = false;
  for (int t = 0; t < 1000 && !settled; ++t) {
    draw(random, 6, 0, z);
    x = moved * z;
    settled = monitor.push(x) && monitor.alert().stage == AlertStage::re_referenced;
  }
  ASSERT_TRUE(settled);
  EXPECT_EQ(monitor.alert().first, 2);
  EXPECT_EQ(monitor.alert().second, 6);
}

TEST(ScaleMonitor, RaisesConfirmsAndRecovers) {
  SampleGenerator random(6);
  ScaleSettings settings;
  settings.channels = 20;
  ScaleMonitor monitor(settings);
  for (int t = 0; t < 200; ++t) monitor.push(random.log_distance(20, 8), 8, 0);
  ASSERT_EQ(monitor.stage(), AlertStage::armed);
  for (int t = 0; t < 100; ++t) monitor.push(2 * std::log(2.) + random.log_distance(20, 8), 8, 0);
  ASSERT_EQ(monitor.stage(), AlertStage::confirmed);
  EXPECT_EQ(monitor.alert().direction, AlertDirection::up);
  EXPECT_NEAR(monitor.alert().to, 2, .5);
  bool recovered = false;
  for (int t = 0; t < 100 && !recovered; ++t) {
    recovered = monitor.push(random.log_distance(20, 8), 8, 0) &&
                monitor.alert().stage == AlertStage::recovered;
  }
  EXPECT_TRUE(recovered);
}

TEST(ScaleMonitor, AShiftThatStaysBecomesTheReference) {
  SampleGenerator random(7);
  ScaleSettings settings;
  settings.channels = 20;
  ScaleMonitor monitor(settings);
  int re_referenced = 0, raised = 0;
  for (int t = 0; t < 3000; ++t) {
    const double y = random.log_distance(20, 8) - (t > 100 ? 2 * std::log(2.) : 0);
    if (!monitor.push(y, 8, 0)) continue;
    re_referenced += monitor.alert().stage == AlertStage::re_referenced;
    raised += monitor.alert().stage == AlertStage::confirmed;
  }
  EXPECT_EQ(re_referenced, 1);
  EXPECT_LE(raised, 2);
  EXPECT_NEAR(monitor.state().offset, -2 * std::log(2.), .3);
}

// A panel of p channels fed whole, scatter I known.
struct Fed {
  explicit Fed(Index p, std::uint64_t seed) : random(seed), x(p), alerts(settings(p)) {}
  static AlertSettings settings(Index p) {
    AlertSettings s;
    s.channels = p;
    return s;
  }
  const AlertEvents& feed(double nu, double rho, double volatility = 1) {
    draw(random, nu, rho, x);
    x *= volatility;
    AlertInput input;
    input.distance = x.squaredNorm();
    input.fitted = true;
    input.nu = 8;
    input.centred = &x;
    return alerts.push(input);
  }
  SampleGenerator random;
  Eigen::VectorXd x;
  Alerts alerts;
};

TEST(Alerts, BudgetIsSharedByAllDirections) {
  const Alerts alerts(Fed::settings(5));
  EXPECT_DOUBLE_EQ(alerts.mean_samples_per_direction(), 25000);
  const Alerts single(Fed::settings(1));
  EXPECT_DOUBLE_EQ(single.mean_samples_per_direction(), 20000);
  EXPECT_FALSE(single.has_shape());
}

TEST(Alerts, ACorrelationChangeIsCalledShapeAndHoldsTheTail) {
  Fed fed(10, 8);
  for (int t = 0; t < 4000; ++t) fed.feed(8, 0);
  ASSERT_EQ(fed.alerts.tail().stage(), AlertStage::armed);
  bool shape_confirmed = false, tail_confirmed = false;
  for (int t = 0; t < 600; ++t) {
    const AlertEvents& events = fed.feed(8, .4);
    for (int i = 0; i < events.count; ++i) {
      const Alert& alert = events.event[static_cast<std::size_t>(i)];
      shape_confirmed |= alert.kind == AlertKind::shape && alert.stage == AlertStage::confirmed;
      tail_confirmed |= alert.kind == AlertKind::tail && alert.stage == AlertStage::confirmed &&
                        fed.alerts.shape().active();
    }
  }
  EXPECT_TRUE(shape_confirmed);
  EXPECT_FALSE(tail_confirmed);
}

TEST(Alerts, AVolatilityChangeIsCalledScale) {
  Fed fed(20, 9);
  for (int t = 0; t < 6000; ++t) fed.feed(8, 0);
  bool scale = false, tail = false;
  for (int t = 0; t < 300; ++t) {
    const AlertEvents& events = fed.feed(8, 0, 2);
    for (int i = 0; i < events.count; ++i) {
      const Alert& alert = events.event[static_cast<std::size_t>(i)];
      if (alert.stage != AlertStage::confirmed) continue;
      scale |= alert.kind == AlertKind::scale;
      tail |= alert.kind == AlertKind::tail;
    }
  }
  EXPECT_TRUE(scale);
  EXPECT_FALSE(tail);
}

TEST(Alerts, StaleSamplesReachNoMonitor) {
  Fed fed(4, 10);
  for (int t = 0; t < 100; ++t) fed.feed(8, 0);
  const std::int64_t before = fed.alerts.tail().count();
  AlertInput input;
  input.distance = 1e9;
  input.fresh = false;
  EXPECT_EQ(fed.alerts.push(input).count, 0);
  EXPECT_EQ(fed.alerts.tail().count(), before);
}

TEST(RepeatScreen, TwoExactRepeatsAreStale) {
  RepeatScreen screen;
  const Eigen::VectorXd fine{{.1, 0, .3}}, stale{{0., 0., .3}}, level{{0., .2, .3}};
  EXPECT_FALSE(screen.stale(fine));
  EXPECT_TRUE(screen.stale(stale));
  EXPECT_TRUE(screen.stale(level, &stale));
  EXPECT_FALSE(screen.stale(level, &fine));
  EXPECT_EQ(screen.screened, 2);
}

// Identity: a restored copy goes on exactly like the original.
TEST(Alerts, StateRestores) {
  Fed fed(6, 11);
  for (int t = 0; t < 3001; ++t) fed.feed(8, 0);
  Alerts copy(Fed::settings(6));
  copy.restore(fed.alerts.state());
  for (int t = 0; t < 1500; ++t) {
    fed.feed(t < 700 ? 2 : 8, t < 300 ? 0 : .5);
    AlertInput input;
    input.distance = fed.x.squaredNorm();
    input.fitted = true;
    input.nu = 8;
    input.centred = &fed.x;
    const AlertEvents& events = copy.push(input);
    ASSERT_EQ(fed.alerts.tail().stage(), copy.tail().stage()) << t;
    ASSERT_EQ(fed.alerts.shape().statistic(), copy.shape().statistic()) << t;
    ASSERT_EQ(fed.alerts.scale().stage(), copy.scale().stage()) << t;
    ASSERT_LE(events.count, 4);
  }
}

TEST(AlertText, SaysWhatChangedSinceWhenAndHowSure) {
  Alert alert;
  alert.kind = AlertKind::tail;
  alert.direction = AlertDirection::heavier;
  alert.stage = AlertStage::confirmed;
  alert.from = 8;
  alert.to = 3.91;
  alert.since = 1000;
  alert.wald = kWaldBound;
  EXPECT_EQ(
      describe(alert, 1100),
      "tails got heavier: degrees of freedom from 8 to about 3.91, volatility changes filtered "
      "out; since 100 samples ago; confirmed with confidence 0.952 on samples after the raise");
  alert.kind = AlertKind::shape;
  alert.direction = AlertDirection::any;
  alert.stage = AlertStage::raised;
  alert.from = 1;
  alert.to = alert.statistic = 1.5;
  alert.threshold = 1.31;
  alert.first = 0;
  alert.second = 3;
  EXPECT_EQ(
      describe(alert, 1100, "tin", "zinc"),
      "correlations moved: statistic 1.5 where 1 is quiet, most between tin and zinc; since 100 "
      "samples ago; raised, not yet confirmed (statistic 1.5, threshold 1.31)");
  EXPECT_NE(describe(alert, 1100).find("channel 1 and channel 4"), std::string::npos);
}

}  // namespace
}  // namespace tailweir::detect

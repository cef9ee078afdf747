// The streaming tracker against the cold fixed point of the same samples.
#include "core/scatter/tracker.h"

#include <gtest/gtest.h>

#include <Eigen/Cholesky>
#include <cmath>
#include <cstdlib>
#include <random>
#include <vector>

#include "core/panel.h"
#include "core/scatter/fixed_point.h"
#include "core/spd/blas.h"
#include "tests/oracles/allocations.h"

namespace tailweir {
namespace {

// t samples with AR(1) correlation .6, centre `centre`; fixed seed.
class Stream {
 public:
  Stream(Index p, double nu, std::uint64_t seed, double centre = 0)
      : p_(p), centre_(centre), bits_(seed), gamma_(nu / 2, 2 / nu) {}
  Eigen::VectorXd next() {
    const double scale = 1 / std::sqrt(gamma_(bits_));
    Eigen::VectorXd x(p_);
    double before = 0;
    for (Index j = 0; j < p_; ++j) {
      before = j == 0 ? normal_(bits_) : .6 * before + .8 * normal_(bits_);
      x(j) = before * scale + centre_;
    }
    return x;
  }

 private:
  Index p_;
  double centre_;
  std::mt19937_64 bits_;
  std::normal_distribution<double> normal_;
  std::gamma_distribution<double> gamma_;
};

TrackerSettings settings_of(Index p, Memory::Kind kind, double length, double tolerance = 0,
                            CentreKind centre = CentreKind::zero) {
  TrackerSettings settings;
  settings.channels = p;
  settings.memory = {kind, length};
  settings.tolerance = tolerance;
  settings.centre.kind = centre;
  return settings;
}

// The exact fixed point of the last samples with these masses.
FixedPoint exact(const std::vector<Eigen::VectorXd>& past, const Eigen::ArrayXd& mass, double nu,
                 CentreKind centre = CentreKind::zero) {
  const Index n = mass.size();
  Eigen::MatrixXd x(past.back().size(), n);
  for (Index k = 0; k < n; ++k) x.col(k) = past[past.size() - static_cast<std::size_t>(n - k)];
  FixedPointSettings how;
  how.nu = nu;
  how.centre = centre;
  how.tolerance = 1e-12;
  return fit_scatter(x, mass, how);
}

double distance(const Tracker& tracker, const FixedPoint& fit) {
  Eigen::MatrixXd s;
  Eigen::VectorXd m;
  if (!tracker.scatter(s, m)) return INFINITY;
  return spd::affine_invariant_distance(fit.scatter, s);
}

// Reference: the cold fixed point (itself checked against R). F of a polish is the distance before
// it.
TEST(StatisticalTracker, ResidualAtPolishIsTheTrueDistance) {
  for (const Index p : {4, 10, 30}) {
    for (const Index ratio : {5, 10}) {
      for (const double nu : {2.5, 4., 12.}) {
        const Index n = p * ratio;
        Tracker tracker(settings_of(p, Memory::Kind::window_samples, static_cast<double>(n)), nu);
        Stream stream(p, nu, static_cast<std::uint64_t>(p * 100 + ratio));
        std::vector<Eigen::VectorXd> past;
        double found = 0, truth = 0;
        int checks = 0;
        for (Index t = 0; checks < 10; ++t) {
          past.push_back(stream.next());
          tracker.predict(past.back(), t);
          tracker.absorb();
          if (t < 2 * n || t % (n / 3 + 1) != 0 || tracker.health().since_polish < n / 6) continue;
          const FixedPoint fit = exact(past, Eigen::ArrayXd::Ones(n), nu);
          truth += std::pow(distance(tracker, fit), 2);
          Tracker copy = tracker;
          ASSERT_TRUE(copy.polish_now());
          found += std::pow(copy.health().residual_at_polish, 2);
          ++checks;
        }
        EXPECT_NEAR(std::sqrt(found / truth), 1, .15) << "p " << p << " n " << n << " nu " << nu;
      }
    }
  }
}

// The published residual between polishes: within a factor 2 of the truth, seldom optimistic by a
// quarter.
TEST(StatisticalTracker, PublishedResidualIsHonestBetweenPolishes) {
  for (const bool half_life : {false, true}) {
    for (const Index p : {6, 20, 40}) {
      const Index n = 6 * p;
      const double length = half_life ? static_cast<double>(n) / 2.885 : static_cast<double>(n);
      Tracker tracker(
          settings_of(p, half_life ? Memory::Kind::half_life_samples : Memory::Kind::window_samples,
                      length),
          4);
      Stream stream(p, 4, static_cast<std::uint64_t>(p));
      std::vector<Eigen::VectorXd> past;
      double published = 0, truth = 0;
      int far = 0, checks = 0;
      for (Index t = 0; checks < 40; ++t) {
        past.push_back(stream.next());
        tracker.predict(past.back(), t);
        tracker.absorb();
        if (t < 6 * n || t % 13 != 0) continue;
        const Index kept = half_life ? 6 * n : n;
        Eigen::ArrayXd mass = Eigen::ArrayXd::Ones(kept);
        if (half_life) {
          for (Index k = 0; k < kept; ++k) {
            mass(k) = std::exp2(-static_cast<double>(kept - 1 - k) / length);
          }
        }
        const double d = distance(tracker, exact(past, mass, 4));
        published += std::pow(tracker.health().residual, 2);
        truth += d * d;
        far += tracker.health().residual > 2 * d || tracker.health().residual < .5 * d;
        ++checks;
      }
      const double ratio = std::sqrt(published / truth);
      EXPECT_GT(ratio, .75) << p << (half_life ? " half-life" : " window");
      EXPECT_LT(ratio, 2) << p << (half_life ? " half-life" : " window");
      EXPECT_LE(far, 8) << p << (half_life ? " half-life" : " window");
    }
  }
}

// Published figures of the method (core/scatter/README.md): error before and after a polish.
TEST(StatisticalTracker, ErrorStaysSmallAgainstTheStatisticalError) {
  const Index p = 30, n = 150;
  Tracker tracker(settings_of(p, Memory::Kind::window_samples, n), 4);
  Stream stream(p, 4, 5);
  Eigen::MatrixXd truth(p, p);
  for (Index i = 0; i < p; ++i) {
    for (Index j = 0; j < p; ++j) truth(i, j) = std::pow(.6, std::abs(static_cast<double>(i - j)));
  }
  std::vector<Eigen::VectorXd> past;
  double before = 0, after = 0, statistical = 0;
  int count = 0;
  for (Index t = 0; count < 8; ++t) {
    past.push_back(stream.next());
    tracker.predict(past.back(), t);
    const Tracker copy = tracker;
    tracker.absorb();
    if (t < 2 * n || tracker.health().iterations == 0) continue;
    const FixedPoint now = exact(past, Eigen::ArrayXd::Ones(n), 4);
    after += std::pow(distance(tracker, now), 2);
    before += std::pow(tracker.health().residual_at_polish, 2);
    statistical += std::pow(spd::affine_invariant_distance(truth, now.scatter), 2);
    ++count;
  }
  EXPECT_LT(std::sqrt(before / statistical), .15);
  EXPECT_LT(std::sqrt(after / statistical), .025);
}

// Reference: cold fits of what is inside a window of time, irregular stamps, several leaving at
// once.
TEST(Tracker, TimeWindowHoldsWhatIsInside) {
  const double length = 60;
  Tracker tracker(settings_of(3, Memory::Kind::window_time, length, 1e-10), 4);
  Stream stream(3, 4, 8);
  std::mt19937_64 bits(8);
  std::vector<Eigen::VectorXd> past;
  std::vector<std::int64_t> times;
  std::int64_t now = 0;
  int checked = 0;
  for (int t = 0; t < 900; ++t) {
    now += static_cast<std::int64_t>(bits() % 1500) * 1000000 + (t % 100 == 99 ? 9000000000 : 0);
    past.push_back(stream.next());
    times.push_back(now);
    tracker.predict(past.back(), now);
    tracker.absorb();
    if (t < 300 || t % 25 != 0) continue;
    Index inside = 0;
    for (const std::int64_t time : times) inside += static_cast<double>(now - time) * 1e-9 < length;
    ASSERT_TRUE(tracker.tracking());
    EXPECT_EQ(tracker.health().samples_effective, static_cast<double>(inside));
    EXPECT_LT(distance(tracker, exact(past, Eigen::ArrayXd::Ones(inside), 4)), 1e-8);
    ++checked;
  }
  EXPECT_GT(checked, 20);
}

// Reference: cold fits with weights by time stamp.
TEST(Tracker, TimeHalfLifeWeighsByStamps) {
  const double half_life = 20;
  Tracker tracker(
      settings_of(3, Memory::Kind::half_life_time, half_life, 1e-10, CentreKind::estimated), 4);
  Stream stream(3, 4, 9, 5);
  std::mt19937_64 bits(9);
  std::vector<Eigen::VectorXd> past;
  std::vector<std::int64_t> times;
  std::int64_t now = 0;
  for (int t = 0; t < 2500; ++t) {
    now += static_cast<std::int64_t>(bits() % 1500) * 1000000;
    past.push_back(stream.next());
    times.push_back(now);
    tracker.predict(past.back(), now);
    tracker.absorb();
    if (t < 300 || t % 200 != 0) continue;
    const Index n = static_cast<Index>(past.size());
    Eigen::ArrayXd mass(n);
    for (Index k = 0; k < n; ++k) {
      mass(k) = std::exp2(-static_cast<double>(now - times[static_cast<std::size_t>(k)]) * 1e-9 /
                          half_life);
    }
    EXPECT_LT(distance(tracker, exact(past, mass, 4, CentreKind::estimated)), 1e-8) << t;
  }
}

// Property: a gap of a thousand half-lives forgets everything and starts again.
TEST(Tracker, LongGapStartsAgain) {
  Tracker tracker(settings_of(3, Memory::Kind::half_life_time, 10), 4);
  Stream stream(3, 4, 10);
  std::int64_t now = 0;
  for (int t = 0; t < 200; ++t) {
    now += 1000000000;
    tracker.predict(stream.next(), now);
    tracker.absorb();
  }
  EXPECT_TRUE(tracker.tracking());
  now += 1000000LL * 1000000000LL;
  tracker.predict(stream.next(), now);
  tracker.absorb();
  EXPECT_FALSE(tracker.tracking());
  for (int t = 0; t < 60; ++t) {
    now += 1000000000;
    tracker.predict(stream.next(), now);
    tracker.absorb();
  }
  EXPECT_TRUE(tracker.tracking());
}

// Limit: a long exponential stream neither overflows nor drifts (omega is renormalised).
TEST(Tracker, HalfLifeStaysExactForLong) {
  Tracker tracker(settings_of(2, Memory::Kind::half_life_samples, 8, 1e-10), 4);
  Stream stream(2, 4, 11);
  std::vector<Eigen::VectorXd> past;
  for (int t = 0; t < 20000; ++t) {
    past.push_back(stream.next());
    tracker.predict(past.back(), t);
    tracker.absorb();
  }
  const Index n = 400;
  Eigen::ArrayXd mass(n);
  for (Index k = 0; k < n; ++k) mass(k) = std::exp2(-static_cast<double>(n - 1 - k) / 8);
  EXPECT_LT(distance(tracker, exact(past, mass, 4)), 1e-8);
}

// Identity: a polish in steps while samples arrive lands where the exact window is, to first order.
TEST(Tracker, PolishInStepsCatchesUp) {
  const Index p = 120, n = 600;  // large enough to be done in steps
  Tracker tracker(settings_of(p, Memory::Kind::window_samples, n), 4);
  Stream stream(p, 4, 12);
  std::vector<Eigen::VectorXd> past;
  std::int64_t polishes = 0;
  int checked = 0;
  for (Index t = 0; checked < 2; ++t) {
    past.push_back(stream.next());
    tracker.predict(past.back(), t);
    tracker.absorb();
    if (t > 2 * n && tracker.health().polishes > polishes) {
      EXPECT_GT(tracker.health().since_polish, 0);
      const FixedPoint fit = exact(past, Eigen::ArrayXd::Ones(n), 4);
      EXPECT_LT(distance(tracker, fit), .6 * tracker.health().residual_at_polish);
      EXPECT_NEAR(tracker.health().log_det, fit.log_det, .02 * static_cast<double>(p));
      ++checked;
    }
    polishes = tracker.health().polishes;
  }
}

// Symmetry: units of channels do not matter beyond themselves.
TEST(Tracker, FollowsChangesOfUnit) {
  Stream stream(4, 4, 13);
  Tracker plain(settings_of(4, Memory::Kind::window_samples, 40), 4);
  Tracker scaled(settings_of(4, Memory::Kind::window_samples, 40), 4);
  const Eigen::Vector4d unit(1e-90, 1e80, 1, 3.7e12);
  for (int t = 0; t < 200; ++t) {
    const Eigen::VectorXd x = stream.next();
    const double a = plain.predict(x, t);
    const double b = scaled.predict(x.cwiseProduct(unit), t);
    if (t > 60) {
      EXPECT_NEAR(b / a, 1, 1e-7);
    }
    plain.absorb();
    scaled.absorb();
  }
}

TEST(Tracker, AllocatesNothingAfterConstruction) {
  if (!oracles::counting()) GTEST_SKIP() << "the sanitizer owns malloc";
  for (const bool half_life : {false, true}) {
    for (const Index p : {5, 120}) {
      const double length = static_cast<double>(half_life ? 2 * p : 5 * p);
      Tracker tracker(
          settings_of(p, half_life ? Memory::Kind::half_life_samples : Memory::Kind::window_samples,
                      length),
          4);
      Stream stream(p, 4, 14);
      std::vector<Eigen::VectorXd> samples;
      for (Index t = 0; t < 14 * p; ++t) samples.push_back(stream.next());
      std::size_t before = 0;
      for (Index t = 0; t < 14 * p; ++t) {
        // The BLAS library takes its own buffers once, at the first calls.
        if (t == 6 * p) before = oracles::allocations();
        tracker.predict(samples[static_cast<std::size_t>(t)], t);
        tracker.absorb();
      }
      EXPECT_EQ(oracles::allocations() - before, 0u) << p << (half_life ? " half-life" : " window");
      EXPECT_GT(tracker.health().polishes, 2);
    }
  }
}

// Property: whatever comes, what is published is finite and positive definite (seeds 1 to 4).
void throw_hostile_samples(int samples, std::uint64_t seed) {
  const Index p = 4;
  PanelSettings panel;
  panel.name = "hostile";
  panel.channels = p;
  panel.centre.kind = seed % 2 == 0 ? CentreKind::zero : CentreKind::estimated;
  HorizonSettings window, decay;
  window.name = "w";
  window.memory = {Memory::Kind::window_samples, 30};
  decay.name = "d";
  decay.memory = {Memory::Kind::half_life_samples, 9};
  panel.horizons = {window, decay};
  Panel target(panel);
  std::mt19937_64 bits(seed);
  std::normal_distribution<double> normal;
  Eigen::VectorXd x(p), last = Eigen::VectorXd::Zero(p);
  Eigen::MatrixXd s;
  Eigen::VectorXd m;
  int mood = 0, live = 0;
  for (int t = 0; t < samples; ++t) {
    if (bits() % 40 == 0) mood = static_cast<int>(bits() % 12);
    for (Index j = 0; j < p; ++j) x(j) = normal(bits);
    if (mood == 1) x *= 1e150;
    if (mood == 2) x *= 1e-150;
    if (mood == 3) x.setConstant(7);
    if (mood == 4) x = last;
    if (mood == 5) x(2) = 2 * x(1) - x(0);
    if (mood == 6) x.setZero();
    if (mood == 7) x(1) *= 1e6;
    if (mood == 8) x = x(0) * Eigen::VectorXd::Ones(p);
    if (mood == 9 && bits() % 4 == 0) x *= 1e12;
    if (mood == 10) x(3) = 0;
    last = x;
    target.push(x, t);
    for (Index h = 0; h < 2; ++h) {
      const Estimate& e = target.estimate(h);
      ASSERT_FALSE(std::isinf(e.nu) || std::isinf(e.distance) || std::isinf(e.residual) ||
                   std::isinf(e.log_volatility))
          << "seed " << seed << " t " << t;
      if (e.state == HorizonState::live) {
        ++live;
        ASSERT_TRUE(std::isfinite(e.nu) && std::isfinite(e.log_volatility))
            << "seed " << seed << " t " << t;
      }
      if (!target.scatter(h, s, m)) continue;
      ASSERT_TRUE(s.allFinite() && m.allFinite()) << "seed " << seed << " t " << t;
      ASSERT_EQ(Eigen::LLT<Eigen::MatrixXd>(s).info(), Eigen::Success)
          << "seed " << seed << " t " << t << " mood " << mood << "\n"
          << s;
    }
  }
  EXPECT_GT(live, samples / 10);
}

TEST(Panel, PublishesNothingBrokenUnderHostileSamples) {
  for (std::uint64_t seed = 1; seed <= 4; ++seed) throw_hostile_samples(10000, seed);
}
TEST(SlowPanel, PublishesNothingBrokenUnderAMillionHostileSamples) {
  for (std::uint64_t seed = 11; seed <= 14; ++seed) throw_hostile_samples(250000, seed);
}

// Determinism: the same samples give the same bits, through copies and at any time of reading.
TEST(Tracker, ReadingDoesNotChangeTheBits) {
  Stream stream(7, 4, 15);
  Tracker a(settings_of(7, Memory::Kind::window_samples, 60), 4);
  Tracker b(settings_of(7, Memory::Kind::window_samples, 60), 4);
  Eigen::MatrixXd s;
  Eigen::VectorXd m;
  for (int t = 0; t < 400; ++t) {
    const Eigen::VectorXd x = stream.next();
    const double da = a.predict(x, t), db = b.predict(x, t);
    if (!std::isnan(da)) {
      ASSERT_EQ(da, db) << t;
    }
    a.absorb();
    b.absorb();
    b.scatter(s, m);
  }
}

}  // namespace
}  // namespace tailweir

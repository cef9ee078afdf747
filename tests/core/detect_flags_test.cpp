#include <gtest/gtest.h>

#include <Eigen/Cholesky>
#include <Eigen/LU>
#include <cmath>
#include <limits>

#include "core/detect/flags.h"
#include "core/student/student.h"
#include "tests/core/detect_worlds.h"

namespace tailweir::detect {
namespace {

using detect_test::SampleGenerator;

// Oracle: exact quadrature by an independent program (cited value). Tolerance: the 17 nodes' error.
TEST(MixedTail, CentreKnown) {
  const double rows[][5] = {{100, 20, 8, 100, 2.766014195e-2},
                            {30, 4, 3, 20, 9.413621894e-2},
                            {300, 100, 30, 500, 4.480074255e-3},
                            {1000, 20, 8, 60, 1.920139410e-5}};
  for (const auto& row : rows) {
    const PredictiveTail tail(row[1], row[3], row[2], false);
    EXPECT_NEAR(tail.exact(row[0]) / row[4], 1, 2e-6) << row[1];
  }
}

// Limit: nu to infinity is F(p, n - p + 1) (Hotelling).
TEST(MixedTail, NormalLimit) {
  EXPECT_NEAR(PredictiveTail(20, 100, 1e9, false).exact(100) / 3.60761294e-6, 1, 1e-7);
  EXPECT_NEAR(PredictiveTail(4, 20, 1e9, false).exact(30) / 2.52836495e-3, 1, 1e-7);
  EXPECT_NEAR(PredictiveTail(20, 100, 9e5, false).exact(100) / 3.60761294e-6, 1, 1e-3);
}

TEST(MixedTail, InterpolationStaysWithinItsStatedError) {
  for (double p : {4., 20., 100.}) {
    for (double nu : {2., 8., 40.}) {
      PredictiveTail tail(p, 5 * p, nu, true);
      for (double d = .01 * p; d < 60 * p; d *= 1.07) {
        const double exact = tail.exact(d);
        EXPECT_NEAR(tail.p_value(d), exact, 1e-4 * exact) << p << " " << nu << " " << d;
      }
    }
  }
}

TEST(MixedTail, NoDegreesOfFreedomIsUndefined) {
  EXPECT_TRUE(std::isnan(PredictiveTail(20, 19, 8, false).p_value(3)));
  EXPECT_TRUE(std::isnan(PredictiveTail(20, 20, 8, true).p_value(3)));
}

struct Small {
  Eigen::MatrixXd s{{1, .5, .2}, {.5, 2, .3}, {.2, .3, 1.5}};
  Eigen::VectorXd x{{3, -2, 1}};
  Eigen::MatrixXd precision = s.inverse();
  Eigen::VectorXd q = precision * x, diagonal = precision.diagonal();
  ScoredSample sample{x.dot(q), x, q, diagonal};
  ScatterKnowledge known{std::numeric_limits<double>::infinity(), 5, false};
};

// Oracle: independent program (cited values), scatter known.
TEST(ChannelTest, AttributionOfAKnownScatter) {
  const Small small;
  EXPECT_NEAR(small.sample.distance, 16.4453280318, 1e-9);
  EXPECT_NEAR(student::tail_probability(small.sample.distance, 3, 5), .048795259859, 1e-11);
  ChannelTest test(3);
  std::vector<ChannelPart> parts;
  test.attribute(small.sample, small.known, 3, parts);
  ASSERT_EQ(parts.size(), 3U);
  const double r[] = {3.64469697, -2.70845694, .66732903};
  const double t[] = {3.37539912, -1.90771622, .38528259};
  const double p[] = {.01183276, .09808654, .71146806};
  const double share[] = {11.76143141, 4.12723658, .55666004};
  double sum = 0;
  for (std::size_t j = 0; j < 3; ++j) {
    EXPECT_EQ(parts[j].channel, static_cast<Index>(j));
    EXPECT_NEAR(parts[j].residual, r[j], 1e-7);
    EXPECT_NEAR(parts[j].t, t[j], 1e-7);
    EXPECT_NEAR(parts[j].p_value, p[j], 1e-7);
    EXPECT_NEAR(parts[j].share, share[j], 1e-7);
    EXPECT_NEAR(parts[j].drop, r[j] * r[j], 1e-6);
    sum += parts[j].share;
  }
  EXPECT_NEAR(sum, small.sample.distance, 1e-9);
  EXPECT_NEAR(test.smallest(small.sample, small.known, .5), 3 * p[0], 1e-7);
  EXPECT_EQ(test.smallest(small.sample, small.known, 1e-6), 1);  // cannot reach that rate
}

// Oracle: independent program (cited values).
TEST(ChannelTest, GroupOfTwo) {
  const Small small;
  ChannelTest test(3);
  Eigen::VectorXd q = small.q.head(2);
  Eigen::MatrixXd precision = small.precision.topLeftCorner(2, 2);
  ChannelTest::GroupResult result;
  ASSERT_TRUE(test.group(q, precision, small.sample.distance, 3, small.known, result));
  EXPECT_NEAR(result.q, 15.7786613651, 1e-9);
  EXPECT_NEAR(result.f, 8.3534089580, 1e-9);
  EXPECT_NEAR(result.p_value, .018449513514, 1e-11);
}

// Identity: the group of all channels is the joint test, also with an estimated scatter.
TEST(ChannelTest, GroupOfAllIsTheJointTest) {
  const Small small;
  ChannelTest test(3);
  Eigen::MatrixXd precision = small.precision;
  ChannelTest::GroupResult result;
  const ScatterKnowledge known{40, 5, false};
  ASSERT_TRUE(test.group(small.q, precision, small.sample.distance, 3, known, result));
  EXPECT_NEAR(result.q, small.sample.distance, 1e-9);
  EXPECT_NEAR(result.p_value, PredictiveTail(3, 40, 5, false).exact(small.sample.distance), 1e-9);
}

// Limit: an estimate from very many samples is a known scatter.
TEST(ChannelTest, ManySamplesAreAKnownScatter) {
  const Small small;
  ChannelTest test(3);
  std::vector<ChannelPart> known, estimated;
  test.attribute(small.sample, small.known, 3, known);
  test.attribute(small.sample, {1e7, 5, false}, 3, estimated);
  for (std::size_t j = 0; j < 3; ++j) {
    EXPECT_NEAR(estimated[j].p_value / known[j].p_value, 1, 1e-5);
  }
}

// Statistical: 20000 values, standard errors by the Fisher information: ln nu .0130 (p 20, nu 8,
// I_eff .0046), a .0058 or less; five of them, false failure 1e-6.
TEST(RunningFit, FindsScaleAndNu) {
  SampleGenerator random(2);
  RunningFitSettings settings;
  settings.memory = 20000;
  RunningFit fit(20, settings);
  for (int t = 0; t < 60000; ++t) fit.push(std::exp(.5 + random.log_distance(20, 8)));
  EXPECT_NEAR(std::log(fit.nu() / 8), 0, .065);
  EXPECT_NEAR(fit.log_scale(), .5, .03);
  EXPECT_EQ(fit.held(), 20000);
}

// Identity: at a maximum the rolling passes stay where the full fit put them.
TEST(RunningFit, PassesAgreeWithTheWholeFit) {
  SampleGenerator random(4);
  std::vector<double> y(1500);
  for (double& value : y) value = std::exp(random.log_distance(4, 5));
  RunningFitSettings settings;
  settings.memory = settings.minimum = settings.rank_memory = 1500;
  RunningFit once(4, settings), often(4, settings);
  for (double value : y) once.push(value);
  for (int round = 0; round < 8; ++round) {
    for (double value : y) often.push(value);
  }
  EXPECT_NEAR(once.nu(), often.nu(), 1e-6 * once.nu());
  EXPECT_NEAR(once.log_scale(), often.log_scale(), 1e-6);
}

// Brute force.
TEST(RunningFit, RankCountsThePast) {
  RunningFitSettings settings;
  settings.minimum = 10;
  settings.memory = 30;
  settings.rank_memory = 20;
  RunningFit fit(2, settings);
  EXPECT_EQ(fit.rank_p_value(3), 1);
  SampleGenerator random(9);
  std::vector<double> past;
  for (int t = 0; t < 100; ++t) {
    const double d = std::exp(random.log_distance(2, 4));
    int above = 0, count = 0;
    for (std::size_t i = past.size(); i > 0 && count < 20; --i, ++count) above += past[i - 1] >= d;
    if (count > 0) {
      EXPECT_DOUBLE_EQ(fit.rank_p_value(d), (1. + above) / (count + 1.)) << t;
    }
    past.push_back(d);
    fit.push(d);
  }
}

// One quiet stream with a known scatter; p_values of the mixed F first, then of the running fit.
struct Stream {
  SampleGenerator random{12};
  Eigen::VectorXd x = Eigen::VectorXd(10), ones = Eigen::VectorXd::Ones(10);
  FlagScore feed(Flags& flags, double factor = 1) {
    random.sample(6, x);
    x *= factor;
    return flags.score({x.squaredNorm(), x, x, ones},
                       {std::numeric_limits<double>::infinity(), 6, false});
  }
};

// Statistical: 60000 samples at rate 1e-2 expect 600 at most; joint and channel tests together make
// .9-1 of it. Bounds at five standard deviations and more.
TEST(Flags, KeepTheirRateAndCountWhatWasExpected) {
  Stream stream;
  FlagRates rates;
  rates.unusual = 1e-2;
  Flags flags(10, rates);
  for (int t = 0; t < 60000; ++t) stream.feed(flags);
  EXPECT_EQ(flags.counts().scored, 60000);
  EXPECT_NEAR(flags.counts().expected_unusual, 600, 1e-6);
  EXPECT_NEAR(flags.counts().expected_severe, 6, 1e-6);
  EXPECT_LT(static_cast<double>(flags.counts().unusual), 600 + 5 * 24.5);
  EXPECT_GT(static_cast<double>(flags.counts().unusual), .8 * 600 - 5 * 24.5);
  EXPECT_LE(flags.counts().severe, flags.counts().unusual);
}

TEST(Flags, RatesChangeWithoutARefit) {
  Stream stream;
  Flags flags(10, {});
  for (int t = 0; t < 1500; ++t) stream.feed(flags);
  const double nu = flags.fit().nu();
  flags.set_rates({.05, .01, 0});
  EXPECT_EQ(flags.fit().nu(), nu);
  EXPECT_NEAR(flags.counts().expected_unusual, 1.5, 1e-9);
  for (int t = 0; t < 100; ++t) stream.feed(flags);
  EXPECT_NEAR(flags.counts().expected_unusual, 1.5 + 5, 1e-9);
}

TEST(Flags, GateWithholdsOnlyWhenAskedAndCounts) {
  Stream stream;
  Flags open(10, {}), gated(10, {1e-3, 1e-4, 1e-6});
  for (int t = 0; t < 1200; ++t) {
    stream.feed(open);
    stream.feed(gated);
  }
  EXPECT_TRUE(stream.feed(open, 100).absorb);
  const FlagScore score = stream.feed(gated, 100);
  EXPECT_FALSE(score.absorb);
  EXPECT_EQ(score.level, FlagLevel::severe);
  EXPECT_EQ(open.counts().gated, 0);
  EXPECT_EQ(gated.counts().gated, 1);
}

TEST(Flags, PartialSamplesAreScoredOnWhatIsObserved) {
  Stream stream;
  Flags flags(10, {});
  for (int t = 0; t < 1500; ++t) stream.feed(flags);
  const std::int64_t held = flags.fit().held();
  Eigen::VectorXd x{{.1, 9, -.2}}, ones = Eigen::VectorXd::Ones(3);
  const Index channel[] = {2, 5, 7};
  const ScoredSample sample{x.squaredNorm(), x, x, ones, channel};
  const ScatterKnowledge known{50, 6, false};
  const FlagScore score = flags.score(sample, known);
  EXPECT_FALSE(score.fitted);
  EXPECT_NEAR(score.joint, PredictiveTail(3, 50, 6, false).exact(x.squaredNorm()), 1e-12);
  EXPECT_EQ(flags.fit().held(), held);
  std::vector<ChannelPart> parts;
  flags.attribute(sample, known, 5, parts);
  ASSERT_EQ(parts.size(), 3U);
  EXPECT_EQ(parts[0].channel, 5);
}

TEST(Flags, NotFiniteIsSevere) {
  Stream stream;
  Flags flags(10, {});
  const ScoredSample sample{std::numeric_limits<double>::infinity(), stream.ones, stream.ones,
                            stream.ones};
  EXPECT_EQ(flags.score(sample, {100, 6, false}).level, FlagLevel::severe);
}

// Identity: a restored copy goes on exactly like the original.
TEST(Flags, StateRestores) {
  Stream stream;
  Flags flags(10, {}), copy(10, {});
  for (int t = 0; t < 1700; ++t) stream.feed(flags);
  copy.restore(flags.state());
  Stream same = stream;
  for (int t = 0; t < 800; ++t) {
    const FlagScore a = stream.feed(flags), b = same.feed(copy);
    ASSERT_EQ(a.joint, b.joint);
    ASSERT_EQ(a.rank, b.rank);
  }
  EXPECT_EQ(flags.fit().nu(), copy.fit().nu());
}

}  // namespace
}  // namespace tailweir::detect

// False-flag rates and power through a real tracker: the whole way from sample to flag.
#include <gtest/gtest.h>

#include <cmath>

#include "core/detect/flags.h"
#include "core/scatter/tracker.h"
#include "tests/core/detect_worlds.h"

namespace tailweir::detect {
namespace {

using detect_test::SampleGenerator;

// A tracker at the true nu over a window of n samples, and the flags beside it.
class Watched {
 public:
  Watched(Index p, double nu, double n, std::uint64_t seed)
      : random_(seed),
        nu_(nu),
        n_(n),
        tracker_(settings(p, n), nu),
        flags_(p, {}),
        x_(p),
        centred_(p),
        q_(p),
        diagonal_(p) {}

  static TrackerSettings settings(Index p, double n) {
    TrackerSettings settings;
    settings.channels = p;
    settings.memory = {Memory::Kind::window_samples, n};
    return settings;
  }
  // Draws, scores and absorbs one sample. False while the window fills or the fit is not on.
  bool next(FlagScore& score) {
    random_.sample(nu_, x_);
    const bool scored = look(x_, true, score);
    tracker_.absorb();
    return scored && score.fitted;
  }
  // Scores a sample of its own that is neither remembered nor absorbed.
  bool look(const Eigen::VectorXd& x, bool remember, FlagScore& score) {
    const double d = tracker_.predict(x, t_ += remember);
    if (!tracker_.tracking() || tracker_.health().samples_effective < n_ - 1) return false;
    tracker_.residuals(q_, diagonal_);
    tracker_.centred(centred_);
    score = flags_.score({d, centred_, q_, diagonal_}, {n_, nu_, false}, remember);
    return true;
  }
  Index first_named() {
    flags_.attribute({centred_.dot(q_), centred_, q_, diagonal_}, {n_, nu_, false}, 5, parts_);
    return parts_.front().channel;
  }
  SampleGenerator& random() { return random_; }

 private:
  SampleGenerator random_;
  double nu_, n_;
  Tracker tracker_;
  Flags flags_;
  Eigen::VectorXd x_, centred_, q_, diagonal_;
  std::vector<ChannelPart> parts_;
  std::int64_t t_ = 0;
};

// Statistical: 200000 samples at 1e-2 and 1e-3 expect 2000 and 200; bounds 15% and five standard
// deviations (45 and 14; the recalibration's own spread is of the same size, hence twice).
TEST(StatisticalFlagRate, KeptThroughATrackerOfFiveSamplesAChannel) {
  for (double nu : {4., 30.}) {
    Watched watched(20, nu, 100, 7);
    FlagScore score;
    double count = 0, often = 0, seldom = 0, combined = 0;
    for (int t = 0; t < 202000; ++t) {
      if (!watched.next(score)) continue;
      ++count;
      often += score.joint <= 1e-2;
      seldom += score.joint <= 1e-3;
      combined += score.combined <= 1e-3;
    }
    ASSERT_GT(count, 190000);
    EXPECT_NEAR(often, .01 * count, .15 * .01 * count + 5 * 45);
    EXPECT_NEAR(seldom, .001 * count, .15 * .001 * count + 10 * 14);
    EXPECT_NEAR(combined, .001 * count, .15 * .001 * count + 10 * 14);
  }
}

// Statistical: measured power .53-.63 at nu = 8 over 400 trials, standard error .025; the name is
// right in .998 of flags.
TEST(StatisticalFlagRate, OneShiftedChannelIsFlaggedAndNamedFirst) {
  Watched watched(20, 8, 200, 11);
  FlagScore score;
  Eigen::VectorXd moved(20);
  int tried = 0, flagged = 0, named = 0;
  for (int t = 0; t < 6000; ++t) {
    if (watched.next(score) && t % 10 == 0) {
      watched.random().sample(8, moved);
      moved[3] += 6;  // scatter units: less than 6 standard deviations
      if (!watched.look(moved, false, score)) continue;
      ++tried;
      if (score.combined > 1e-3) continue;
      ++flagged;
      named += watched.first_named() == 3;
    }
  }
  ASSERT_GT(tried, 300);
  EXPECT_GE(flagged, (.5 - .03) * tried);
  EXPECT_GE(named, .95 * flagged);
}

// Identity: when the model is right the correction leaves p-values as they are; when P^0.8 is fed,
// it undoes the power. Statistical: 1/sqrt(.03 * 10000) = 6% in the exponent, five of them.
TEST(StatisticalRecalibration, UndoesAPowerInTheFarEnd) {
  SampleGenerator random(13);
  Recalibration right(.03), wrong(.03);
  for (int t = 0; t < 100000; ++t) {
    const double p = std::exp(-.5 * random.chi_square(2));  // uniform
    right.push(p);
    wrong.push(std::pow(p, .8));
  }
  EXPECT_NEAR(std::log(right.apply(1e-3) / 1e-3), 0, 1.3);
  EXPECT_NEAR(std::log(wrong.apply(std::pow(1e-3, .8)) / 1e-3), 0, 1.3);
  EXPECT_NEAR(right.apply(.5), .5, .01);
  EXPECT_NEAR(right.apply(1), 1, 1e-12);
}

}  // namespace
}  // namespace tailweir::detect

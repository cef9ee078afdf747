// What the streaming estimators of nu promise beside their value: nothing allocated, the same bits
// every time, and a finite, labelled answer to degenerate input.
#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <random>

#include "core/scatter/fixed_point.h"
#include "core/tail/tail.h"
#include "tests/oracles/allocations.h"
#include "tests/reference/reference.h"

namespace tailweir {
namespace {

constexpr NuMethod kMethods[] = {NuMethod::leave_one_out, NuMethod::likelihood, NuMethod::pop,
                                 NuMethod::trace_ratio,   NuMethod::kurtosis,   NuMethod::censored};

struct Case {
  Eigen::ArrayXd mass, weight, distance;
  tail::FitView view() const { return {mass, weight, distance, 6, 5, false}; }
};

Case fitted(std::uint64_t seed, bool equal) {
  std::mt19937_64 bits(seed);
  const Eigen::MatrixXd x = reference::t_samples(6, 90, 4, bits);
  Case c;
  c.mass = Eigen::ArrayXd::Ones(90);
  if (!equal) c.mass = (Eigen::ArrayXd::LinSpaced(90, -2, 0)).exp();
  c.mass /= c.mass.sum();
  FixedPointSettings how;
  how.nu = 5;
  const FixedPoint fit = fit_scatter(x, c.mass, how);
  c.weight = fit.weight;
  c.distance = fit.distance;
  return c;
}

// Property: counted calls of malloc.
TEST(StreamingTail, AllocatesNothing) {
  for (const bool equal : {true, false}) {
    const Case c = fitted(1, equal);
    const tail::FitView view = c.view();
    tail::Workspace workspace(90);
    const NuSettings settings;
    const tail::NuEstimate first = tail::leave_one_out(view, settings, workspace);
    tail::leave_one_out_censored(view, settings, workspace);
    const std::size_t before = oracles::allocations();
    tail::leave_one_out(view, settings, workspace);
    tail::leave_one_out(view, settings, workspace, &first);
    tail::leave_one_out_censored(view, settings, workspace);
    tail::likelihood_step(view, settings);
    tail::pop_step(view, settings);
    tail::light_tail_moment(view, 10);
    EXPECT_EQ(oracles::allocations(), before);
  }
}

TEST(StreamingTail, AllocationCountSeesOne) {
  if (!oracles::counting()) return;  // the sanitizer owns malloc
  const std::size_t before = oracles::allocations();
  const Eigen::VectorXd some = Eigen::VectorXd::Ones(100);
  EXPECT_GT(oracles::allocations(), before);
  EXPECT_EQ(some.sum(), 100);
}

// Identity: equal input, equal bits, whatever the workspace held before.
TEST(StreamingTail, GivesTheSameBitsAgain) {
  for (const bool equal : {true, false}) {
    const Case c = fitted(2, equal);
    tail::Workspace one(90), other(400);
    other.delta.setConstant(7);
    other.log_posterior.setConstant(-3);
    const tail::NuEstimate a = tail::leave_one_out(c.view(), {}, one);
    const tail::NuEstimate b = tail::leave_one_out(c.view(), {}, other);
    EXPECT_EQ(a.nu, b.nu);
    EXPECT_EQ(a.nu_low, b.nu_low);
    EXPECT_EQ(a.nu_high, b.nu_high);
    EXPECT_EQ(a.standard_error_log, b.standard_error_log);
    const tail::NuEstimate d = tail::leave_one_out(c.view(), {}, one, &a);
    const tail::NuEstimate e = tail::leave_one_out(c.view(), {}, other, &b);
    EXPECT_EQ(d.nu, e.nu);
  }
}

// Brute force: the censored posterior by golden section on the plain likelihood.
TEST(StreamingTail, CensoredMatchesBruteForce) {
  for (std::uint64_t seed = 1; seed <= 6; ++seed) {
    const Case c = fitted(seed, seed % 2 == 0);
    tail::Workspace workspace(90);
    const double effective = tail::leave_one_out_distances(c.view(), workspace);
    const Eigen::ArrayXd delta = workspace.delta.head(90);
    const tail::NuEstimate found = tail::leave_one_out_censored(c.view(), {}, workspace);
    const double expected = reference::censored_nu(delta, c.mass, effective, .05, 10);
    EXPECT_NEAR(found.nu / expected, 1, 1e-6) << "seed " << seed;
  }
}

// Property: samples that no scatter fits, or that say nothing about the tail.
TEST(StreamingTail, ColdEstimatesOfDegenerateSamplesAreFiniteAndSaySo) {
  for (int kind = 0; kind < 9; ++kind) {
    std::mt19937_64 bits(17);
    Eigen::MatrixXd x = reference::t_samples(3, kind == 0 ? 2 : 30, 4, bits);
    Eigen::ArrayXd mass = Eigen::ArrayXd::Ones(x.cols());
    if (kind == 1) x.setZero();
    if (kind == 2) x.setConstant(2.5);
    if (kind == 3) x *= 1e140;
    if (kind == 4) x *= 1e-140;
    if (kind == 5) x.col(4) *= 1e140;
    if (kind == 6) mass(7) = 1e6;
    if (kind == 7) x.row(2) = x.row(1);
    if (kind == 8) x.rightCols(20).setZero();
    const bool hopeless = kind == 1 || kind == 2 || kind == 7;
    for (const NuMethod method : kMethods) {
      for (const CentreKind centre_kind : {CentreKind::zero, CentreKind::estimated}) {
        NuSettings settings;
        settings.method = method;
        CentreSettings centre;
        centre.kind = centre_kind;
        const tail::NuEstimate found = tail::estimate_nu(x, mass, centre, settings);
        const std::string where = "kind " + std::to_string(kind) + ", method " +
                                  std::to_string(static_cast<int>(method)) + ", centre " +
                                  std::to_string(static_cast<int>(centre_kind));
        EXPECT_TRUE(found.nu >= settings.floor && found.nu <= settings.ceiling) << where;
        EXPECT_TRUE(found.nu_low <= found.nu && found.nu <= found.nu_high) << where;
        EXPECT_TRUE(found.nu_low >= settings.floor && found.nu_high <= settings.ceiling) << where;
        EXPECT_FALSE(std::isnan(found.standard_error_log)) << where;
        if (hopeless && method != NuMethod::kurtosis) {
          EXPECT_EQ(found.status, tail::NuStatus::not_identified) << where;
        }
      }
    }
  }
}

// Property: random hostile distances and masses through every streaming entry (seed printed).
TEST(StreamingTail, RandomHostileDistancesGiveFiniteLabelledEstimates) {
  constexpr std::uint64_t kSeed = 20260501;
  SCOPED_TRACE("seed 20260501");
  std::mt19937_64 bits(kSeed);
  std::uniform_real_distribution<double> uniform;
  tail::Workspace workspace(60);
  const NuSettings settings;
  for (int round = 0; round < 400; ++round) {
    const Index n = 2 + static_cast<Index>(uniform(bits) * 58);
    Case c{Eigen::ArrayXd(n), Eigen::ArrayXd(n), Eigen::ArrayXd(n)};
    const double spread = uniform(bits) * 200;
    for (Index i = 0; i < n; ++i) {
      c.mass(i) = uniform(bits) < .2 ? 0 : std::exp(8 * uniform(bits));
      c.distance(i) = uniform(bits) < .1 ? 0 : std::exp(spread * (uniform(bits) - .5));
    }
    c.mass(0) = 1;
    c.mass /= c.mass.sum();
    c.weight = 11 / (5 + c.distance);
    tail::NuEstimate previous;
    previous.nu = previous.unblended = std::exp(7 * uniform(bits));
    previous.nu_low = previous.nu / (1 + uniform(bits));
    previous.nu_high = previous.nu * (1 + 3 * uniform(bits));
    int which = 0;
    for (const tail::NuEstimate& found :
         {tail::leave_one_out(c.view(), settings, workspace),
          tail::leave_one_out(c.view(), settings, workspace, &previous),
          tail::leave_one_out_censored(c.view(), settings, workspace),
          tail::likelihood_step(c.view(), settings), tail::pop_step(c.view(), settings)}) {
      EXPECT_TRUE(found.nu >= settings.floor && found.nu <= settings.ceiling)
          << round << " " << which;
      EXPECT_TRUE(found.nu_low <= found.nu && found.nu <= found.nu_high) << round << " " << which;
      EXPECT_FALSE(std::isnan(found.standard_error_log)) << round << " " << which;
      EXPECT_FALSE(std::isnan(found.unblended)) << round << " " << which;
      ++which;
    }
  }
}

}  // namespace
}  // namespace tailweir

// Degrees of freedom: published-source formulas against test vectors, R data and a plain second
// implementation.
#include "core/tail/tail.h"

#include <gtest/gtest.h>

#include <Eigen/Cholesky>
#include <cmath>
#include <random>

#include "core/scatter/fixed_point.h"
#include "core/student/student.h"
#include "tests/oracles/r_data.h"
#include "tests/reference/reference.h"

namespace tailweir {
namespace {

FixedPoint cold(const Eigen::MatrixXd& x, const Eigen::ArrayXd& mass, double nu,
                CentreKind centre) {
  FixedPointSettings how;
  how.nu = nu;
  how.centre = centre;
  how.tolerance = 1e-13;
  return fit_scatter(x, mass, how);
}

tail::FitView view(const Eigen::ArrayXd& v, const FixedPoint& fit, double nu0, bool centre) {
  return {v, fit.weight, fit.distance, fit.scatter.rows(), nu0, centre};
}

Eigen::ArrayXd equal(Eigen::Index n) {
  return Eigen::ArrayXd::Constant(n, 1 / static_cast<double>(n));
}

Eigen::MatrixXd t_samples(Eigen::Index p, Eigen::Index n, double nu, std::uint64_t seed) {
  std::mt19937_64 bits(seed);
  return reference::t_samples(p, n, nu, bits);
}

// Oracle: test vector T1 (p 2, n 12, zero mean), computed by two independent implementations.
TEST(LeaveOneOut, MatchesTestVectorWithZeroCentre) {
  const Eigen::MatrixXd x = reference::wave_samples(2, 12, false);
  const Eigen::ArrayXd v = equal(12);
  const FixedPoint fit = cold(x, v, 5, CentreKind::zero);
  ASSERT_EQ(fit.reason, StopReason::converged);
  EXPECT_NEAR(fit.scatter(0, 0), .66223925, 5e-9);
  EXPECT_NEAR(fit.scatter(1, 0), -.21333372, 5e-9);
  EXPECT_NEAR(fit.scatter(1, 1), 1.05273006, 5e-9);
  EXPECT_NEAR(fit.distance(0), 5.538048, 5e-7);
  EXPECT_NEAR(fit.distance(1), .191953, 5e-7);
  EXPECT_NEAR(fit.distance(2), 8.369883, 5e-7);
  EXPECT_NEAR(fit.distance(3), .175722, 5e-7);
  tail::Workspace workspace(12);
  const NuSettings settings;
  tail::NuEstimate pass = tail::leave_one_out(view(v, fit, 5, false), settings, workspace);
  EXPECT_NEAR(workspace.delta(0), 8.572059, 5e-7);
  EXPECT_NEAR(workspace.delta(1), .175797, 5e-7);
  EXPECT_NEAR(workspace.delta(2), 14.904553, 5e-7);
  EXPECT_NEAR(workspace.delta(3), .160499, 5e-7);
  EXPECT_NEAR(pass.effective_channels, 1.39642984, 5e-9);
  EXPECT_NEAR(pass.unblended, 4.584559, 5e-6);
  EXPECT_NEAR(pass.nu_low, 1.6704, 1e-4);
  EXPECT_NEAR(pass.nu_high, 36.993, 1e-3);
  const FixedPoint second = cold(x, v, pass.unblended, CentreKind::zero);
  const tail::NuEstimate last =
      tail::leave_one_out(view(v, second, pass.unblended, false), settings, workspace);
  EXPECT_NEAR(last.effective_channels, 1.40448256, 5e-8);
  EXPECT_NEAR(last.unblended, 4.557214, 5e-6);
  EXPECT_NEAR(last.nu_low, 1.6616, 1e-4);
  EXPECT_NEAR(last.nu_high, 36.748, 1e-3);
  const double moment =
      tail::light_tail_moment(view(v, second, pass.unblended, false), last.unblended);
  EXPECT_NEAR(moment, 3.37365, 1e-5);
  // The vector blends from nu = 4 to 8; this project switches from 5 to 10 (core/tail/README.md).
  const double share = (1 / last.unblended - 1. / 8) * 8;
  EXPECT_NEAR(1 / (1 / moment + share * (1 / last.unblended - 1 / moment)), 4.197136, 5e-6);
  EXPECT_EQ(last.nu, last.unblended);
  EXPECT_NEAR(last.standard_error_log, 1.120266, 1e-6);
}

// Oracle: the same vector's joint maximum likelihood estimate.
TEST(Likelihood, MatchesTestVectors) {
  NuSettings settings;
  settings.method = NuMethod::likelihood;
  const tail::NuEstimate t1 =
      tail::estimate_nu(reference::wave_samples(2, 12, false), equal(12), {}, settings);
  EXPECT_NEAR(t1.nu, 1.6591, 1e-4);
  Eigen::ArrayXd mass(60);
  for (int i = 0; i < 60; ++i) mass(i) = std::pow(.9, 59 - i);
  const tail::NuEstimate t3 =
      tail::estimate_nu(reference::wave_samples(3, 60, false), mass, {}, settings);
  EXPECT_NEAR(t3.nu, .8750, 1e-4);
}

// Oracle: test vector T2 (p 3, n 25, centre estimated).
TEST(LeaveOneOut, MatchesTestVectorWithEstimatedCentre) {
  const Eigen::MatrixXd x = reference::wave_samples(3, 25, true);
  const Eigen::ArrayXd v = equal(25);
  const FixedPoint fit = cold(x, v, 5, CentreKind::estimated);
  EXPECT_NEAR(fit.centre(0), .700927, 5e-7);
  EXPECT_NEAR(fit.centre(1), .993772, 5e-7);
  EXPECT_NEAR(fit.centre(2), 1.504358, 5e-7);
  EXPECT_NEAR(fit.scatter(0, 0), .56319184, 5e-9);
  EXPECT_NEAR(fit.scatter(2, 1), -.13639036, 5e-9);
  EXPECT_NEAR(fit.scatter(2, 2), .60719427, 5e-9);
  tail::Workspace workspace(25);
  const tail::NuEstimate pass = tail::leave_one_out(view(v, fit, 5, true), {}, workspace);
  EXPECT_NEAR(workspace.delta(0), 40.579927, 5e-6);
  EXPECT_NEAR(workspace.delta(1), .252897, 5e-7);
  EXPECT_NEAR(workspace.delta(2), 23.739407, 5e-6);
  EXPECT_NEAR(pass.effective_channels, 2.45584371, 5e-8);
  EXPECT_NEAR(pass.unblended, 2.819896, 5e-6);
  NuSettings settings;
  CentreSettings centre;
  centre.kind = CentreKind::estimated;
  const tail::NuEstimate last = tail::estimate_nu(x, v, centre, settings);
  EXPECT_NEAR(last.effective_channels, 2.52488286, 5e-7);
  EXPECT_NEAR(last.unblended, 2.720920, 5e-6);
  EXPECT_NEAR(last.nu_low, 1.4512, 1e-4);
  EXPECT_NEAR(last.nu_high, 7.5723, 2e-4);
}

// Oracle: test vector T3 (p 3, n 60, weights .9^age, zero mean).
TEST(LeaveOneOut, MatchesTestVectorWithUnequalMasses) {
  const Eigen::MatrixXd x = reference::wave_samples(3, 60, false);
  Eigen::ArrayXd mass(60);
  for (int i = 0; i < 60; ++i) mass(i) = std::pow(.9, 59 - i);
  const Eigen::ArrayXd v = mass / mass.sum();
  EXPECT_NEAR(1 / v.square().sum(), 18.93183610, 5e-8);
  const FixedPoint fit = cold(x, v, 5, CentreKind::zero);
  EXPECT_NEAR(fit.scatter(0, 0), .99771105, 5e-9);
  EXPECT_NEAR(fit.scatter(1, 0), .08021193, 5e-9);
  EXPECT_NEAR(fit.scatter(2, 2), .84361359, 5e-9);
  tail::Workspace workspace(60);
  const tail::NuEstimate pass = tail::leave_one_out(view(v, fit, 5, false), {}, workspace);
  EXPECT_NEAR(workspace.delta(0), 15.371507, 5e-6);
  EXPECT_NEAR(pass.effective_channels, 2.09225959, 5e-8);
  EXPECT_NEAR(pass.unblended, 1.478990, 5e-6);
  const tail::NuEstimate last = tail::estimate_nu(x, mass, {}, {});
  EXPECT_NEAR(last.effective_channels, 2.33117754, 5e-7);
  EXPECT_NEAR(last.unblended, 1.327386, 5e-6);
  EXPECT_NEAR(last.nu_low, .8236, 1e-4);
  EXPECT_NEAR(last.nu_high, 3.0027, 1e-4);
  EXPECT_NEAR(last.nu, last.unblended, 1e-12);  // p max v = .3 x 1.0... : no blend
}

// Oracle: test vector T4, eight points on the unit circle: everything in closed form but nu.
TEST(LeaveOneOut, MatchesPointsOnTheCircle) {
  Eigen::MatrixXd x(2, 8);
  for (int i = 0; i < 8; ++i) {
    x(0, i) = std::cos(i * std::acos(-1.) / 4);
    x(1, i) = std::sin(i * std::acos(-1.) / 4);
  }
  const FixedPoint fit = cold(x, equal(8), 5, CentreKind::zero);
  EXPECT_NEAR(fit.scatter(0, 0), .5, 1e-12);
  EXPECT_NEAR(fit.distance(3), 2, 1e-12);
  tail::Workspace workspace(8);
  const tail::NuEstimate pass = tail::leave_one_out(view(equal(8), fit, 5, false), {}, workspace);
  EXPECT_NEAR(workspace.delta(5), 2.49431431, 5e-9);
  EXPECT_NEAR(pass.effective_channels, 1.5, 1e-12);
  EXPECT_NEAR(pass.unblended, 7.036487, 5e-6);
  EXPECT_NEAR(pass.nu_low, 2.4920, 1e-4);
  EXPECT_NEAR(pass.nu_high, 58.5417, 1e-3);
}

// Oracle: tests/reference (brute loops and bisection), random cases, fixed seeds.
TEST(LeaveOneOut, MatchesPlainSecondImplementation) {
  for (std::uint64_t seed = 1; seed <= 12; ++seed) {
    const Eigen::Index p = 2 + static_cast<Eigen::Index>(seed % 5) * 2;
    const Eigen::Index n = p * (4 + static_cast<Eigen::Index>(seed % 3) * 4);
    const Eigen::MatrixXd x = t_samples(p, n, seed % 2 == 0 ? 3 : 12, seed);
    Eigen::ArrayXd mass = Eigen::ArrayXd::Ones(n);
    if (seed % 3 == 0) {
      for (Eigen::Index i = 0; i < n; ++i) mass(i) = std::exp(.02 * static_cast<double>(i));
    }
    const Eigen::ArrayXd v = mass / mass.sum();
    const reference::Fit plain = reference::fit(x, v, 5, false);
    const FixedPoint fit = cold(x, v, 5, CentreKind::zero);
    EXPECT_LT((plain.scatter - fit.scatter).norm(), 1e-11 * plain.scatter.norm());
    const reference::Posterior expected =
        reference::leave_one_out(plain, v, p, 5, false, 10, nullptr);
    tail::Workspace workspace(n);
    const tail::NuEstimate found = tail::leave_one_out(view(v, fit, 5, false), {}, workspace);
    EXPECT_NEAR(found.unblended / expected.nu, 1, 1e-8) << "seed " << seed;
    EXPECT_NEAR(found.nu / expected.blended, 1, 1e-5) << "seed " << seed;
    EXPECT_NEAR(std::log(found.nu_high / std::max(expected.high, found.nu)), 0, 1e-7);
  }
}

// Identity: the narrowed grid is an approximation of the whole one, to 1e-3 in ln nu.
TEST(LeaveOneOut, NarrowedGridAgreesWithWholeGrid) {
  for (std::uint64_t seed = 1; seed <= 60; ++seed) {
    const double nu = seed % 4 == 0 ? 2.5 : seed % 4 == 1 ? 5 : seed % 4 == 2 ? 15 : 60;
    const Eigen::Index p = seed % 2 == 0 ? 4 : 12;
    const Eigen::Index n = p * (seed % 3 == 0 ? 5 : 20);
    const Eigen::MatrixXd x = t_samples(p, n + 20, nu, seed);
    tail::Workspace workspace(n);
    const FixedPoint before = cold(x.leftCols(n), equal(n), 5, CentreKind::zero);
    const tail::NuEstimate first =
        tail::leave_one_out(view(equal(n), before, 5, false), {}, workspace);
    const FixedPoint after = cold(x.rightCols(n), equal(n), 5, CentreKind::zero);
    const tail::NuEstimate whole =
        tail::leave_one_out(view(equal(n), after, 5, false), {}, workspace);
    const tail::NuEstimate narrow =
        tail::leave_one_out(view(equal(n), after, 5, false), {}, workspace, &first);
    EXPECT_NEAR(std::log(narrow.nu / whole.nu), 0, 1e-3) << "seed " << seed;
    EXPECT_NEAR(std::log(narrow.nu_low / whole.nu_low), 0, 4e-3) << "seed " << seed;
    EXPECT_NEAR(std::log(narrow.nu_high / whole.nu_high), 0, 1e-2) << "seed " << seed;
  }
}

// Property: gross outliers pull the plain estimate down and leave the censored one near the truth.
TEST(Censored, SeparatesOutliersFromTail) {
  Eigen::MatrixXd x = t_samples(6, 400, 5, 3);
  for (int i = 0; i < 16; ++i) x.col(i * 25) *= 12;  // 4%
  NuSettings settings;
  const double plain = tail::estimate_nu(x, equal(400), {}, settings).nu;
  settings.method = NuMethod::censored;
  const double censored = tail::estimate_nu(x, equal(400), {}, settings).nu;
  EXPECT_LT(plain, 3);
  EXPECT_GT(censored, 3);
  EXPECT_GT(censored, 1.25 * plain);
  EXPECT_LT(censored, 7);
}

// Property: whatever the distances, no number that is not finite comes out.
TEST(LeaveOneOut, SurvivesDegenerateDistances) {
  const NuSettings settings;
  for (int kind = 0; kind < 8; ++kind) {
    const Eigen::Index n = kind == 7 ? 2 : 30;
    Eigen::ArrayXd v = equal(n), d = Eigen::ArrayXd::LinSpaced(n, .1, 9);
    if (kind == 0) d.setZero();
    if (kind == 1) d.setConstant(4);
    if (kind == 2) d(3) = 1e300;
    if (kind == 3) d(5) = std::nan("");
    if (kind == 4) v(0) = 29, v /= v.sum();
    if (kind == 5) d *= 1e-200;
    if (kind == 6) d.head(15).setZero();
    const Eigen::ArrayXd u = 9 / (5 + d);
    tail::Workspace workspace(n);
    for (const bool centre : {false, true}) {
      const tail::FitView fit{v, u, d, 4, 5, centre};
      for (const tail::NuEstimate& found :
           {tail::leave_one_out(fit, settings, workspace),
            tail::leave_one_out_censored(fit, settings, workspace),
            tail::likelihood_step(fit, settings), tail::pop_step(fit, settings)}) {
        EXPECT_TRUE(std::isfinite(found.nu)) << kind;
        EXPECT_TRUE(found.nu >= settings.floor && found.nu <= settings.ceiling) << kind;
        EXPECT_TRUE(std::isfinite(found.nu_low) && std::isfinite(found.nu_high)) << kind;
        EXPECT_FALSE(std::isnan(found.standard_error_log)) << kind;
      }
      if (kind == 0 || kind == 3) {
        EXPECT_EQ(tail::leave_one_out(fit, settings, workspace).status,
                  tail::NuStatus::not_identified);
      }
    }
  }
}

// Oracle: R 4.2, MASS::cov.trob iterated to full maximum likelihood; profile intervals likewise.
TEST(Likelihood, MatchesROnOpenData) {
  NuSettings settings;
  settings.method = NuMethod::likelihood;
  CentreSettings centre;
  centre.kind = CentreKind::estimated;
  const auto check = [&](const char* data, double nu, double low, double high) {
    const Eigen::MatrixXd x = oracles::r_samples(data);
    const tail::NuEstimate found =
        tail::estimate_nu(x, Eigen::ArrayXd::Ones(x.cols()), centre, settings);
    EXPECT_NEAR(found.nu / nu, 1, 1e-6) << data;
    EXPECT_NEAR(found.nu_low / low, 1, 1e-3) << data;
    EXPECT_NEAR(found.nu_high / high, 1, 1e-3) << data;
    EXPECT_EQ(found.status, tail::NuStatus::estimated);
  };
  check(oracles::kEuStockReturns, 6.179999485, 5.406097, 7.114271);
  check(oracles::kBushfire, 2.834385256, 1.4816, 7.0640);
  check(oracles::kNoxComplete, 17.96450418, 12.032, 29.246);
  check(oracles::kSp500, 3.720146504, 3.2028, 4.3768);
}

// Oracle: the joint likelihood of stackloss rises to nu = infinity (R, computed): the estimate says
// so.
TEST(Likelihood, GoesToItsCeilingOnStackloss) {
  NuSettings settings;
  settings.method = NuMethod::likelihood;
  CentreSettings centre;
  centre.kind = CentreKind::estimated;
  const Eigen::MatrixXd x = oracles::r_samples(oracles::kStackLoss);
  const tail::NuEstimate found =
      tail::estimate_nu(x, Eigen::ArrayXd::Ones(x.cols()), centre, settings);
  EXPECT_EQ(found.status, tail::NuStatus::at_ceiling);
  EXPECT_EQ(found.nu, settings.ceiling);
}

// Brute force: POP with the exact leave-one-out refit of every sample, against the O(1) correction.
TEST(Pop, AgreesWithExactLeaveOneOutRefits) {
  const Eigen::MatrixXd x = t_samples(5, 80, 4, 11);
  NuSettings settings;
  settings.method = NuMethod::pop;
  const double fast = tail::estimate_nu(x, equal(80), {}, settings).nu;
  double nu = 5;
  for (int round = 0; round < 60; ++round) {
    double mean = 0;
    for (Eigen::Index i = 0; i < 80; ++i) {
      Eigen::ArrayXd mass = Eigen::ArrayXd::Ones(80);
      mass(i) = 0;
      const FixedPoint fit = cold(x, mass, nu, CentreKind::zero);
      mean += x.col(i).dot(fit.scatter.llt().solve(x.col(i))) / 80;
    }
    const double theta = (1 - 5. / 80) * mean / 5;
    const double next = 2 * theta / (theta - 1);
    if (std::abs(next - nu) < 1e-6) break;
    nu = next;
  }
  // The correction holds weights still while a sample is out: a few per cent of nu at p/n = 1/16.
  EXPECT_NEAR(std::log(fast / nu), 0, .06);
}

// Oracle: converged quadrature, two independent implementations.
TEST(FiniteSample, MatchesKnownFactors) {
  EXPECT_NEAR(tail::finite_sample_gamma(10, 3, 40), 1.302151, 5e-7);
  EXPECT_NEAR(tail::finite_sample_gamma(40, 10, 120), 1.483229, 5e-7);
  EXPECT_NEAR(tail::finite_sample_scale(10, 3, 40), 1.04, 5e-3);
  EXPECT_NEAR(tail::finite_sample_scale(30, 3, 40), 1.14, 5e-3);
}

// Property: fewer samples than channels still give an estimate, from blocks of channels.
TEST(LeaveOneOut, WorksOnBlocksWhenSamplesAreFew) {
  const Eigen::MatrixXd x = t_samples(40, 36, 4, 5);
  const tail::NuEstimate found = tail::estimate_nu(x, equal(36), {}, {});
  EXPECT_GT(found.nu, 1.5);
  EXPECT_LT(found.nu, 12);
  EXPECT_LE(found.nu_low, found.nu);
  EXPECT_GE(found.nu_high, found.nu);
}

// Limit: trace ratio and kurtosis recover a known nu from a long record (about 4 standard errors).
TEST(StatisticalMoments, RecoverKnownNu) {
  const Eigen::MatrixXd x = t_samples(8, 40000, 9, 21);
  for (const NuMethod method : {NuMethod::kurtosis, NuMethod::trace_ratio, NuMethod::pop,
                                NuMethod::likelihood, NuMethod::leave_one_out}) {
    NuSettings settings;
    settings.method = method;
    const double nu = tail::estimate_nu(x, equal(40000), {}, settings).nu;
    const double width = method == NuMethod::kurtosis      ? 1.5
                         : method == NuMethod::trace_ratio ? 1
                                                           : .5;
    EXPECT_NEAR(nu, 9, width) << static_cast<int>(method);
  }
}

}  // namespace
}  // namespace tailweir

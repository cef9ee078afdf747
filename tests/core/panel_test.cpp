// The panel on real data: a sample at a time must land where R's routine lands on the same window.
#include "core/panel.h"

#include <gtest/gtest.h>

#include <Eigen/LU>
#include <algorithm>
#include <cmath>
#include <map>

#include "core/student/student.h"
#include "tests/oracles/r_data.h"

namespace tailweir {
namespace {

// Snapshots of a panel after some samples (counted from 1) of a data set.
struct Snapshot {
  Estimate estimate;
  Eigen::MatrixXd scatter;
  Eigen::VectorXd centre;
};

std::map<Index, Snapshot> run(const PanelSettings& settings, const Eigen::MatrixXd& x,
                              const std::vector<Index>& at) {
  Panel panel(settings);
  std::map<Index, Snapshot> shots;
  for (Index t = 0; t < x.cols(); ++t) {
    panel.push(x.col(t), t * 1000000000);
    if (std::find(at.begin(), at.end(), t + 1) == at.end()) continue;
    Snapshot& shot = shots[t + 1];
    shot.estimate = panel.estimate(0);
    EXPECT_TRUE(panel.scatter(0, shot.scatter, shot.centre));
  }
  return shots;
}

PanelSettings eu_panel(Memory::Kind kind, double length, NuMethod method) {
  PanelSettings panel;
  panel.name = "eu";
  panel.channels = 4;
  panel.centre.kind = CentreKind::estimated;
  panel.nu.method = method;
  panel.nu.fixed = 4;
  HorizonSettings horizon;
  horizon.name = "h";
  horizon.memory = {kind, length};
  horizon.tolerance = 1e-10;
  panel.horizons = {horizon};
  return panel;
}

// Oracle: MASS::cov.trob 7.3 (maxit 20000, tol 1e-13) on EuStockMarkets returns, nu = 4, last 250
// rows.
TEST(Panel, SlidingWindowMatchesCovTrob) {
  const Eigen::MatrixXd x = oracles::r_samples(oracles::kEuStockReturns);
  ASSERT_EQ(x.cols(), 1859);
  const auto shots = run(eu_panel(Memory::Kind::window_samples, 250, NuMethod::fixed), x,
                         {250, 600, 780, 1320, 1680, 1859});
  const std::map<Index, double> s11 = {{250, .2863411303},  {600, .4155889673},
                                       {780, .7418841380},  {1320, .3507282729},
                                       {1680, 1.303492201}, {1859, 1.456898938}};
  for (const auto& [t, expected] : s11) {
    EXPECT_NEAR(shots.at(t).scatter(0, 0) / expected, 1, 1e-8) << t;
    EXPECT_EQ(shots.at(t).estimate.state, HorizonState::live);
    EXPECT_LE(shots.at(t).estimate.residual, 1e-10);
    EXPECT_EQ(shots.at(t).estimate.nu_status, tail::NuStatus::fixed);
  }
}

// Oracle: the same with nu by full maximum likelihood: nu to 1e-6, the fit to 1e-7.
TEST(Panel, SlidingWindowMatchesFullMaximumLikelihood) {
  const Eigen::MatrixXd x = oracles::r_samples(oracles::kEuStockReturns);
  const auto shots = run(eu_panel(Memory::Kind::window_samples, 250, NuMethod::likelihood), x,
                         {250, 600, 780, 1320, 1680, 1859});
  const double expected[6][6] = {
      {250, 5.364548568, .02382735742, .3057146262, .1673350681, -5.638239066},
      {600, 11.93108518, .1180080992, .5005553103, .1879918061, -3.762869451},
      {780, 20.65306969, .05536087458, .9408918994, .4106257753, -2.875653452},
      {1320, 8.366844718, .05266454383, .4032992295, .1996524997, -5.121231081},
      {1680, 5.681780668, .1836864246, 1.410514411, .6057317419, -2.861280977},
      {1859, 7.967607659, .1627940586, 1.657503432, .9050445290, -2.629294269}};
  for (const auto& row : expected) {
    const Snapshot& shot = shots.at(static_cast<Index>(row[0]));
    EXPECT_NEAR(shot.estimate.nu / row[1], 1, 1e-6) << row[0];
    EXPECT_NEAR(shot.centre(0) / row[2], 1, 1e-6) << row[0];
    EXPECT_NEAR(shot.scatter(0, 0) / row[3], 1, 1e-7) << row[0];
    EXPECT_NEAR(shot.scatter(3, 0) / row[4], 1, 1e-7) << row[0];
    EXPECT_NEAR(8 * shot.estimate.log_volatility, row[5], 1e-6) << row[0];
    EXPECT_NEAR(shot.estimate.covariance_factor, row[1] / (row[1] - 2), 1e-5) << row[0];
  }
}

// Oracle: MASS::cov.trob with weights 2^(-age/100), nu = 4.
TEST(Panel, HalfLifeMatchesCovTrob) {
  const Eigen::MatrixXd x = oracles::r_samples(oracles::kEuStockReturns);
  const auto shots =
      run(eu_panel(Memory::Kind::half_life_samples, 100, NuMethod::fixed), x, {600, 1859});
  const Snapshot& a = shots.at(600);
  EXPECT_NEAR(a.estimate.samples_effective, 279.6620045, 1e-6);
  const double centre_a[4] = {.1099234549, .1408553604, .01858404892, .04012888312};
  const double centre_b[4] = {.1664207936, .1583383199, .1646353131, .02996594154};
  for (int j = 0; j < 4; ++j) {
    EXPECT_NEAR(a.centre(j), centre_a[j], 1e-9);
    EXPECT_NEAR(shots.at(1859).centre(j), centre_b[j], 1e-9);
  }
  EXPECT_NEAR(a.scatter(0, 0) / .4421703521, 1, 1e-8);
  EXPECT_NEAR(a.scatter(3, 3) / .2834356811, 1, 1e-8);
  EXPECT_NEAR(8 * a.estimate.log_volatility, -4.645615829, 1e-8);
  const Snapshot& b = shots.at(1859);
  EXPECT_NEAR(b.estimate.samples_effective, 288.5387010, 1e-6);
  EXPECT_NEAR(b.scatter(0, 0) / 1.239301027, 1, 1e-8);
  EXPECT_NEAR(b.scatter(3, 3) / .6809694010, 1, 1e-8);
  EXPECT_NEAR(8 * b.estimate.log_volatility, -3.334084691, 1e-8);
}

// Oracle: the same weights, nu by full maximum likelihood.
TEST(Panel, HalfLifeMatchesFullMaximumLikelihood) {
  const Eigen::MatrixXd x = oracles::r_samples(oracles::kEuStockReturns);
  const auto shots = run(eu_panel(Memory::Kind::half_life_samples, 100, NuMethod::likelihood),
                         x.leftCols(600), {600});
  EXPECT_NEAR(shots.at(600).estimate.nu / 7.470405679, 1, 1e-6);
}

// Oracle: one-step prediction on the same data, 1609 forecasts at nu = 4 (R): shares of p-values.
TEST(Panel, PredictivePValuesMatchR) {
  const Eigen::MatrixXd x = oracles::r_samples(oracles::kEuStockReturns);
  for (const bool half : {false, true}) {
    Panel panel(half ? eu_panel(Memory::Kind::half_life_samples, 100, NuMethod::fixed)
                     : eu_panel(Memory::Kind::window_samples, 250, NuMethod::fixed));
    int below[3] = {0, 0, 0};
    for (Index t = 0; t < x.cols(); ++t) {
      panel.push(x.col(t), t);
      if (t < 250) continue;
      const double p = panel.estimate(0).p_value;
      below[0] += p < .05;
      below[1] += p < .01;
      below[2] += p < .001;
    }
    EXPECT_NEAR(below[0] / 1609., half ? .0224 : .0273, 5e-5);
    EXPECT_NEAR(below[1] / 1609., half ? .0019 : .0025, 5e-5);
    EXPECT_EQ(below[2], 0);
  }
}

// Oracle: whole-sample fits of R with the window as long as the data: distances and p-values.
TEST(Panel, DistancesOfPlantedRowsMatchR) {
  const Eigen::MatrixXd x = oracles::r_samples(oracles::kEuStockReturns);
  Panel panel(eu_panel(Memory::Kind::window_samples, 1859, NuMethod::fixed));
  for (Index t = 0; t < x.cols(); ++t) panel.push(x.col(t), t);
  const Index rows[5] = {35, 204, 318, 1223, 1651};
  const double d2[5] = {206.7311524, 118.1983045, 110.5811636, 92.12284179, 76.38383209};
  const double p_value[5] = {.001067217574, .003144333246, .003570983961, .005050907725,
                             .007182110306};
  Eigen::MatrixXd s;
  Eigen::VectorXd m;
  ASSERT_TRUE(panel.scatter(0, s, m));
  for (int k = 0; k < 5; ++k) {
    const Eigen::VectorXd c = x.col(rows[k] - 1) - m;
    const double d = c.dot(s.inverse() * c);
    EXPECT_NEAR(d / d2[k], 1, 1e-8);
    EXPECT_NEAR(student::tail_probability(d, 4, 4) / p_value[k], 1, 1e-8);
  }
  EXPECT_NEAR(8 * panel.estimate(0).log_volatility, -4.474637453, 1e-8);
}

// Property: constant, collinear and short data never give a matrix, and the reason is said.
TEST(Panel, SaysWhyItHasNoScatter) {
  PanelSettings settings = eu_panel(Memory::Kind::window_samples, 40, NuMethod::leave_one_out);
  settings.horizons[0].tolerance.reset();
  Panel panel(settings);
  Eigen::MatrixXd s;
  Eigen::VectorXd m;
  Eigen::VectorXd x(4);
  EXPECT_EQ(panel.estimate(0).state, HorizonState::warming);
  for (int t = 0; t < 60; ++t) {
    x << std::sin(t * 1.7), std::cos(t * .9), std::sin(t * .31), 2 * std::sin(t * 1.7);
    panel.push(x, t);
  }
  EXPECT_EQ(panel.estimate(0).state, HorizonState::impaired);
  EXPECT_EQ(panel.estimate(0).reason, StateReason::not_positive_definite);
  EXPECT_FALSE(panel.scatter(0, s, m));
  for (int t = 60; t < 180; ++t) {
    x << std::sin(t * 1.7), std::cos(t * .9), std::sin(t * .31), std::sin(t * t * 2.3);
    panel.push(x, t);
  }
  EXPECT_EQ(panel.estimate(0).state, HorizonState::live);
  EXPECT_TRUE(panel.scatter(0, s, m));
}

// Log of the air quality data with holes: 366 x 4, eight patterns of missing entries.
const char* const kNoxHoles =
    "{data(ambientNOxCH, package='robustbase'); "
    "as.matrix(log(ambientNOxCH[,c('ad','ef','se','sz')]))}";

// Oracle: observed-data maximum likelihood of the same data (R, computed), nu = 4 and full.
TEST(Panel, MissingEntriesMatchObservedDataLikelihood) {
  const Eigen::MatrixXd x = oracles::r_samples(kNoxHoles);
  ASSERT_EQ(x.cols(), 366);
  const PanelSettings fixed = eu_panel(Memory::Kind::window_samples, 366, NuMethod::fixed);
  const auto at_four = run(fixed, x, {366});
  EXPECT_NEAR(at_four.at(366).scatter(0, 0) / .3399694881, 1, 1e-6);
  EXPECT_NEAR(at_four.at(366).scatter(3, 3) / .2334601699, 1, 1e-6);
  EXPECT_LT(at_four.at(366).estimate.coverage, 1);
  const auto full =
      run(eu_panel(Memory::Kind::window_samples, 366, NuMethod::likelihood), x, {366});
  const Snapshot& shot = full.at(366);
  EXPECT_NEAR(shot.estimate.nu / 9.651873484, 1, 1e-6);
  const double centre[4] = {3.073125530, 3.914274285, 2.798745742, 2.840680118};
  for (int j = 0; j < 4; ++j) EXPECT_NEAR(shot.centre(j) / centre[j], 1, 1e-6);
  const double vech[10] = {.3883584941, .2664119195, .2649059677, .2374953498, .2229670822,
                           .1607879593, .1388328196, .3492762955, .2643134208, .2571798437};
  int k = 0;
  for (int j = 0; j < 4; ++j) {
    for (int i = j; i < 4; ++i) EXPECT_NEAR(shot.scatter(i, j) / vech[k++], 1, 1e-6);
  }
}

// Identity: a window that holes have passed through is the window without them.
TEST(Panel, RemovalOfPartialSamplesIsExact) {
  const Eigen::MatrixXd x = oracles::r_samples(oracles::kEuStockReturns).leftCols(700);
  PanelSettings settings = eu_panel(Memory::Kind::window_samples, 120, NuMethod::fixed);
  settings.horizons[0].tolerance.reset();  // the tracker's own way, polishes far apart
  Panel whole(settings), holed(settings);
  Eigen::MatrixXd a, b;
  Eigen::VectorXd m;
  for (Index t = 0; t < x.cols(); ++t) {
    Eigen::VectorXd y = x.col(t);
    if (t > 200 && t < 420) {
      if (t % 3 == 0) y(t % 4) = std::nan("");
      if (t % 7 == 0) y((t + 1) % 4) = y((t + 2) % 4) = std::nan("");
    }
    whole.push(x.col(t), t);
    holed.push(y, t);
    ASSERT_EQ(holed.estimate(0).state, HorizonState::live == whole.estimate(0).state
                                           ? HorizonState::live
                                           : whole.estimate(0).state)
        << t;
    if (t == 400) {
      EXPECT_LT(holed.estimate(0).coverage, .95);
    }
  }
  EXPECT_EQ(holed.estimate(0).coverage, 1);
  ASSERT_TRUE(whole.scatter(0, a, m) && holed.scatter(0, b, m));
  EXPECT_LT((a - b).norm(), .05 * a.norm());  // both within their residuals of the same fixed point
}

// Property: a channel that falls silent for long leaves the others' estimates alone.
TEST(Panel, SilentChannelDoesNotPoisonThePanel) {
  const Eigen::MatrixXd x = oracles::r_samples(oracles::kEuStockReturns).leftCols(900);
  PanelSettings settings = eu_panel(Memory::Kind::window_samples, 120, NuMethod::fixed);
  settings.horizons[0].tolerance.reset();
  Panel four(settings);
  settings.channels = 3;
  Panel three(settings);
  Eigen::MatrixXd a, b;
  Eigen::VectorXd m;
  for (Index t = 0; t < x.cols(); ++t) {
    Eigen::VectorXd y = x.col(t);
    if (t > 300) y(3) = std::nan("");
    four.push(y, t);
    three.push(x.col(t).head(3), t);
    if (t > 200) {
      ASSERT_EQ(four.estimate(0).state, HorizonState::live) << t;
    }
  }
  ASSERT_TRUE(four.scatter(0, a, m) && three.scatter(0, b, m));
  EXPECT_LT((a.topLeftCorner(3, 3) - b).norm(), .1 * b.norm());
  EXPECT_NEAR(four.estimate(0).distance / three.estimate(0).distance, 1, .1);
  EXPECT_NEAR(four.estimate(0).coverage, .75, 1e-12);
}

}  // namespace
}  // namespace tailweir

// Open data read from an installed R at test time.
#include <gtest/gtest.h>

#include <Eigen/LU>
#include <cmath>
#include <string>
#include <vector>

#include "core/detect/alerts.h"
#include "core/detect/flags.h"
#include "core/scatter/fixed_point.h"
#include "core/student/student.h"
#include "tests/oracles/r_data.h"

namespace tailweir::detect {
namespace {

FixedPoint fit(const Eigen::MatrixXd& samples, double nu) {
  FixedPointSettings settings;
  settings.nu = nu;
  settings.centre = CentreKind::estimated;
  return fit_scatter(samples, Eigen::ArrayXd::Ones(samples.cols()), settings);
}

// Cited fact: hbk (robustbase) has 14 planted outliers; with nu = 2 the F tail at .025 flags
// exactly rows 1-14, with nu = 4 only 11-14 (masking).
TEST(DetectOpenData, HbkRows) {
  const Eigen::MatrixXd hbk = oracles::r_samples("as.matrix(robustbase::hbk)");
  ASSERT_EQ(hbk.cols(), 75);
  for (double nu : {2., 4.}) {
    const FixedPoint found = fit(hbk, nu);
    ASSERT_EQ(found.reason, StopReason::converged);
    for (Index row = 0; row < hbk.cols(); ++row) {
      const bool flagged = student::tail_probability(found.distance[row], 4, nu) < .025;
      EXPECT_EQ(flagged, nu == 2 ? row < 14 : row >= 10 && row < 14) << nu << " row " << row + 1;
    }
  }
}

Eigen::MatrixXd eu() { return oracles::r_samples(oracles::kEuStockReturns); }

// Oracle: F tails of rows of EuStockMarkets returns at nu = 4 (R with MASS::cov.trob).
TEST(DetectOpenData, EuStockMarketsTails) {
  const Eigen::MatrixXd x = eu();
  ASSERT_EQ(x.cols(), 1859);
  const FixedPoint found = fit(x, 4);
  const double rows[][2] = {{35, .001067217574},
                            {204, .003144333246},
                            {318, .003570983961},
                            {1223, .005050907725},
                            {1651, .007182110306}};
  for (const auto& row : rows) {
    const double d = found.distance[static_cast<Index>(row[0]) - 1];
    EXPECT_NEAR(student::tail_probability(d, 4, 4) / row[1], 1, 1e-7);
  }
}

// Cited value: attribution of row 35 at the maximum likelihood fit, nu 6.179999485.
TEST(DetectOpenData, EuStockMarketsAttribution) {
  const Eigen::MatrixXd x = eu();
  const FixedPoint found = fit(x, 6.179999485);
  const Eigen::MatrixXd precision = found.scatter.inverse();
  const Eigen::VectorXd centred = x.col(34) - found.centre, q = precision * centred;
  const Eigen::VectorXd diagonal = precision.diagonal();
  const ScoredSample sample{centred.dot(q), centred, q, diagonal};
  ChannelTest test(4);
  std::vector<ChannelPart> parts;
  test.attribute(sample, {1e9, 6.18, true}, 4, parts);
  const double share[] = {119.345, 93.448, 5.552, -32.176};
  const double drop[] = {37.88279666, 33.18961491, .1804806860, 22.48752047};
  for (const ChannelPart& part : parts) {
    EXPECT_NEAR(part.share, share[part.channel], 6e-4);
    EXPECT_NEAR(part.drop, drop[part.channel], 2e-6 * drop[part.channel] + 1e-7);
  }
  EXPECT_EQ(parts[0].channel, 0);
  EXPECT_EQ(parts[2].channel, 3);  // a negative share does not hide the channel
}

double filtered_nu(const std::vector<double>& y, std::size_t begin, std::size_t end) {
  ValueRing ring(static_cast<std::int64_t>(end - begin));
  for (std::size_t i = begin; i < end; ++i) ring.push(y[i]);
  NuFit nu_fit(4, FilterSettings{});
  double nu = 10;
  for (int pass = 0; pass < 12; ++pass) {
    nu_fit.begin(nu, 0, ring.pushed);
    while (!nu_fit.visit(ring, 1000)) {
    }
    nu = nu_fit.nu();
  }
  return nu;
}

// Cited fact: with volatility filtered nu is 12 [10, 15] over all samples, by 250-sample blocks 8,
// 12, 60, 15, 10, 10, 12; with a constant scale 8 by the predictive distances, 6.2 in the joint
// fit. 56 rows hold two or more exactly zero returns.
TEST(DetectOpenData, EuStockMarketsTailsWithVolatilityFiltered) {
  const Eigen::MatrixXd x = eu();
  const FixedPoint found = fit(x, 6.18);
  RepeatScreen screen;
  std::vector<double> y;
  for (Index row = 0; row < x.cols(); ++row) {
    if (!screen.stale(x.col(row))) y.push_back(std::log(found.distance[row]));
  }
  EXPECT_EQ(screen.screened, 56);
  const double all = filtered_nu(y, 0, y.size());
  RecordProperty("nu_all", std::to_string(all));
  EXPECT_GT(all, 9.5);
  EXPECT_LT(all, 15);
  // Block 4 depends on where the block begins by a few rows (15 or 46): left out.
  const double cited[] = {8, 12, 60, 15, 10, 10, 12};
  for (std::size_t block = 0; block < 7; ++block) {
    if (block == 3) continue;
    const double nu = filtered_nu(y, 250 * block, 250 * (block + 1));
    EXPECT_GT(nu / cited[block], .55) << block + 1 << ": " << nu;
    EXPECT_LT(nu / cited[block], 1 / .55) << block + 1 << ": " << nu;
  }
}

}  // namespace
}  // namespace tailweir::detect

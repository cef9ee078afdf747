// The t distribution against printed tables and reference routines; sources beside each figure.
#include "core/student/student.h"

#include <gtest/gtest.h>

#include <cmath>

namespace tailweir {
namespace {

// Cited values: SciPy's own test values of multivariate_t (mean 0, S = I2, nu = 4).
TEST(Student, DensityMatchesPrintedValues) {
  const auto density = [](double a, double b) {
    return std::exp(student::log_density(a * a + b * b, 2, 4, 0));
  };
  EXPECT_NEAR(density(1, 2), .013972450422333741737, 1e-16);
  EXPECT_NEAR(density(4, 1), .0010998721906793330026, 1e-17);
  EXPECT_NEAR(density(2, 4), .00073682844024025606101, 1e-17);
  EXPECT_NEAR(density(3, 2), .0020732579600816823488, 1e-17);
}

// Reference: mpmath with 30 digits. Plain differences of lgamma lose this.
TEST(Student, DensityHoldsForLargeNu) {
  EXPECT_NEAR(student::log_density(7.5, 4, 1e6, 0), -7.42575307033475335, 1e-13);
  EXPECT_NEAR(student::log_density(7.5, 13, 1e9, 0), -15.6962009305982457, 1e-13);
}

// Reference: SciPy (log density of ln d under the F law).
TEST(Student, LogDistanceDensityMatchesValues) {
  EXPECT_NEAR(student::log_density_of_log_distance(2, 4, 5), -1.1330123147, 1e-10);
  EXPECT_NEAR(student::log_density_of_log_distance(5, 4, 5), -6.4564575254, 1e-10);
  EXPECT_NEAR(student::log_density_of_log_distance(3, 20, 8), -.4172233398, 1e-10);
  EXPECT_TRUE(std::isfinite(student::log_density_of_log_distance(700, 4, 5)));
}

// Cited values: Oldham, Myland & Spanier, "An Atlas of Functions", Springer.
TEST(Student, DigammaMatchesAtlas) {
  EXPECT_NEAR(student::digamma(1.5), .03648997398, 1e-11);
  EXPECT_NEAR(student::digamma(2.5), .70315664065, 1e-11);
  EXPECT_NEAR(student::digamma(3.5), 1.10315664065, 1e-11);
  EXPECT_NEAR(student::digamma(4), 1.25611766843, 1e-11);
  EXPECT_NEAR(student::digamma_ratio(4, 3), student::digamma(3.5) - student::digamma(1.5), 1e-14);
  // Both sides of the switch to the asymptotic series.
  EXPECT_NEAR(student::digamma_ratio(7, 40.001), student::digamma_ratio(7, 39.999), 2e-5);
  EXPECT_NEAR(student::digamma_ratio(6, 41), student::digamma(23.5) - student::digamma(20.5),
              1e-14);
}

TEST(Student, GammaRatioMatchesBothBranches) {
  EXPECT_NEAR(student::log_gamma_ratio(6, 41), std::lgamma(23.5) - std::lgamma(20.5), 1e-13);
  EXPECT_NEAR(student::log_gamma_ratio(6, 39), std::lgamma(22.5) - std::lgamma(19.5), 1e-13);
  EXPECT_NEAR(student::log_gamma_ratio(2, 1e12) / std::log(5e11), 1, 1e-12);  // ln(nu/2), exact
}

// Cited values: F tables (95% and 99% points), R 4.2 for the last six.
TEST(Student, TailProbabilityMatchesFTables) {
  const auto tail = [](double f, double p, double nu) {
    return student::tail_probability(f * p, p, nu);
  };
  EXPECT_NEAR(tail(19.1643, 3, 2), .05, 1e-6);
  EXPECT_NEAR(tail(8.7855, 10, 3), .05, 1e-6);
  EXPECT_NEAR(tail(4052.1807, 1, 1), .01, 1e-8);
  EXPECT_NEAR(tail(6.3882329, 4, 4), .05, 1e-9);
  EXPECT_NEAR(tail(4.5336770, 4, 6), .05, 2e-9);
  EXPECT_NEAR(tail(3.4780497, 4, 10), .05, 1e-9);
  EXPECT_NEAR(tail(15.977025, 4, 4), .01, 1e-9);
  EXPECT_NEAR(tail(9.1483010, 4, 6), .01, 1e-9);
  EXPECT_NEAR(tail(5.9943387, 4, 10), .01, 1e-9);
}

// Cited values: chi-square table (NIST/SEMATECH e-Handbook, table 1.3.6.7.4 layout), 4 degrees.
TEST(Student, TailProbabilityTendsToChiSquare) {
  EXPECT_NEAR(student::tail_probability(9.48773, 4, 1e12), .05, 2e-7);
  EXPECT_NEAR(student::tail_probability(13.27670, 4, 1e12), .01, 1e-7);
  EXPECT_NEAR(student::tail_probability(14.86026, 4, 1e12), .005, 1e-7);
  EXPECT_NEAR(student::tail_probability(9.48773, 4, 9e8), .05, 2e-7);
  EXPECT_EQ(student::tail_probability(0, 4, 5), 1);
  EXPECT_EQ(student::tail_probability(INFINITY, 4, 5), 0);
}

// Reference: two independent computations of the Fisher information.
TEST(Student, InformationMatchesValues) {
  const double expected[4][4] = {{10, 3, .046830271, .044200422},
                                 {10, 10, .001766428, .001539155},
                                 {40, 10, .003589612, .003528073},
                                 {1, 5, .003022589, .001633700}};
  for (const auto& row : expected) {
    EXPECT_NEAR(student::information_nu(row[0], row[1]), row[2], 5e-10);
    EXPECT_NEAR(student::information_nu_scale_profiled(row[0], row[1]), row[3], 5e-10);
  }
  EXPECT_NEAR(student::information_nu_scale_profiled(50, 4), .031773239, 5e-10);
  EXPECT_NEAR(student::information_nu_scale_profiled(2, 4), .0069444444, 5e-11);
}

// Reference: R's qt and the closed form of expected shortfall.
TEST(Student, QuantileAndShortfallMatchValues) {
  EXPECT_NEAR(student::quantile(.99, 4), 3.7469474, 5e-8);
  EXPECT_NEAR(student::expected_shortfall(.99, 4), 5.2205842, 5e-8);
  EXPECT_NEAR(student::expected_shortfall(.975, 4), 3.9935570, 5e-8);
  EXPECT_NEAR(student::two_sided_t_probability(3.7469474, 4), .02, 1e-9);
}

}  // namespace
}  // namespace tailweir

// Average run length of a CUSUM by a Markov chain.
//
// S = max(0, S + Z), alarm when S > h. The interval [0, h] is cut into N states of width w = 2h/(2N
// - 1), state 0 = (-infinity, w/2]; the run length from 0 solves (I - R) L = 1. Error O(w^2), so N
// and 2N states combine to (4 L_2N - L_N)/3. Published source: Brook & Evans, Biometrika 59, 1972;
// Richardson's extrapolation. Thread rule: pure functions.
#pragma once

#include <functional>

namespace tailweir::detect {

// below(z) = P(Z <= z), non-decreasing; h > 0; states N >= 2. Extrapolated from N and 2N.
// Allocates; (2N)^3/3 multiply-adds.
double cusum_run_length(const std::function<double(double)>& below, double h, int states = 100);

// h at which the run length is `mean_samples`, to 1e-6 in ln of it; between 0.05 and 60.
double cusum_threshold(const std::function<double(double)>& below, double mean_samples,
                       int states = 100);

// P(Z <= z) for Z = lf(y - a) - lf(y), e^y/p ~ F(p, nu), a != 0: the increments of the scale CUSUM.
// `moved`: the true log-scale of the samples.
double scale_increment_below(double z, double channels, double nu, double a, double moved = 0);

}  // namespace tailweir::detect

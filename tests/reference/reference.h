// A slow, plain second implementation of the numerics: textbook formulas, no tricks, tests only.
#pragma once

#include <Eigen/Core>
#include <random>

namespace tailweir::reference {

struct Fit {
  Eigen::MatrixXd scatter;
  Eigen::VectorXd centre;
  Eigen::ArrayXd weight, distance;
};

// t M-estimate for given nu by the divided EM step, to a relative change of 1e-14 of every entry.
// samples p x n, mass n (any scale). estimate_centre false: centre zero.
Fit fit(const Eigen::MatrixXd& samples, const Eigen::ArrayXd& mass, double nu,
        bool estimate_centre);

struct Posterior {
  double effective_channels, nu, low, high, blended;
};
// One pass of the leave-one-out scaled-F posterior, by brute loops, with the light-tail blend.
Posterior leave_one_out(const Fit& fit, const Eigen::ArrayXd& mass, Eigen::Index p, double nu0,
                        bool centre_estimated, double rate, Eigen::ArrayXd* delta = nullptr);

// nu of the posterior with delta above its weighted (1 - share) quantile censored, from corrected
// distances: golden section over the scale on the plain likelihood at each of the 121 nu.
double censored_nu(const Eigen::ArrayXd& delta, const Eigen::ArrayXd& mass,
                   double effective_channels, double share, double rate);

// Test vectors: x_ij = exp(1.2 sin(3.1 i + 1)) sin(12.9 i + 7.3 j + .4 i j) [+ .5 (j + 1)].
Eigen::MatrixXd wave_samples(Eigen::Index p, Eigen::Index n, bool shifted);

// n samples of t_p(0, S, nu), p x n, S the AR(1) matrix .6^|i-j|.
Eigen::MatrixXd t_samples(Eigen::Index p, Eigen::Index n, double nu, std::mt19937_64& bits);

}  // namespace tailweir::reference

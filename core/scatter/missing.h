// Scatter and centre of a multivariate t from samples with missing entries, by observed-data
// likelihood for given nu, to the exact fixed point.
//
// With o the observed and m the missing channels of sample i, x^ the sample with m replaced by its
// regression on o, and C_i the conditional scatter of m given o (zero elsewhere), all under S and
// the centre:
//   S = sum_i v_i (u_i (x^_i - c)(x^_i - c)' + C_i),   c = sum_i v_i u_i x^_i,
//   u_i = (nu + |o|)/(nu + d_i),   d_i = (x_o - c_o)' S_oo^-1 (x_o - c_o),   sum_i v_i u_i = 1.
// Published source: Liu & Rubin, "ML estimation of the t distribution using EM and its extensions,
// ECM and ECME", Statistica Sinica 5, 1995; the division by sum v u is the parameter expansion of
// Liu, Rubin & Wu, Biometrika 85, 1998. Faster than that: leave-one-out weights (weight.h, with |o|
// for p) and Anderson mixing, safeguarded by the likelihood; derivations in the .cpp.
//
// Assumes that entries are missing at random. No pairwise covariances anywhere: every iterate is
// positive definite. This is the plain way, allocating; one sample at a time is missing_sample.h.
// Thread rule: pure functions.
#pragma once

#include <Eigen/Core>

#include "core/settings.h"

namespace tailweir {

enum class MissingStop {
  converged,              // residual <= tolerance
  iteration_limit,        // max_iterations reached; the last iterate is returned
  not_positive_definite,  // observed entries span less than p dimensions, or a failed factorisation
  not_finite,             // an entry is infinite, or an iterate is not finite
  channel_unobserved,     // `channel` has no observed entry: it cannot be in the panel
  pair_unobserved         // `channel` and `partner` are never observed together: their scatter is
                          // not determined by the samples
};

struct MissingSettings {
  double nu = 4;  // > 0; > 1 when the centre is estimated
  CentreKind centre = CentreKind::zero;
  Eigen::VectorXd given_centre;  // p values, for CentreKind::given
  double tolerance = 1e-12;      // on the residual (affine-invariant distance), > 0
  int max_iterations = 1000;     // >= 1
};

// First iterate of a fit. Empty members are chosen by the fit.
struct MissingStart {
  Eigen::MatrixXd scatter;  // p x p, positive definite
  Eigen::VectorXd centre;   // p
};

struct MissingFit {
  MissingStop reason = MissingStop::iteration_limit;
  Index channel = -1, partner = -1;  // see the last two reasons; -1 otherwise
  Eigen::MatrixXd scatter;           // p x p, symmetric positive definite
  Eigen::VectorXd centre;            // p
  Eigen::MatrixXd imputed;           // p x n: the samples with missing entries filled in
  Eigen::ArrayXd weight;             // u_i, n; 1 for a sample without any observed entry
  Eigen::ArrayXd distance;           // d_i, n, on the observed channels; 0 without any
  Eigen::ArrayXd observed;           // |o_i|, n
  Eigen::ArrayXd coverage;           // p: share of the mass that has the channel observed
  double log_det = 0;                // ln det(scatter)
  double log_likelihood = 0;         // sum_i mass_i ln f(x_o), masses as given
  double residual = 0;               // estimated distance of the scatter to the fixed point
  int iterations = 0;
};

// samples: p x n, one sample a column; a not-a-number is a missing entry, the rest is finite. mass:
// n non-negative values, any positive sum. On any reason but converged and iteration_limit the
// matrices are unspecified and must not be used (coverage is set unless not_finite). A sample
// without observed entries takes no part. O(n p^2 + sum over patterns of |m| p^2) an iteration.
MissingFit fit_missing(const Eigen::Ref<const Eigen::MatrixXd>& samples,
                       const Eigen::Ref<const Eigen::ArrayXd>& mass,
                       const MissingSettings& settings, const MissingStart& start = {});

// sum_i mass_i ln f(x_o) of the observed entries under t_p(centre, scatter, nu). -infinity when the
// scatter is not positive definite. An independent path (factorises S_oo for each sample,
// O(n p^3)): for checks, and for scoring held-out samples.
double observed_log_likelihood(const Eigen::Ref<const Eigen::MatrixXd>& samples,
                               const Eigen::Ref<const Eigen::ArrayXd>& mass,
                               const Eigen::Ref<const Eigen::MatrixXd>& scatter,
                               const Eigen::Ref<const Eigen::VectorXd>& centre, double nu);

// Maximum likelihood of nu, scatter and centre together.
struct MissingLikelihood {
  double nu = 0;      // in [floor, ceiling]
  double nu_low = 0;  // 95% interval of the profile likelihood, clamped to [floor, ceiling]
  double nu_high = 0;
  bool at_floor = false, at_ceiling = false;  // the likelihood still rises beyond
  int fits = 0;
  MissingFit fit;  // at nu
};

// Profile likelihood: its slope at nu is the derivative with scatter and centre held at the fit, so
// a bracketed root search over warm-started fits reaches the joint maximum to about 1e-10 in ln nu.
// settings.nu is where the search starts. 0 < floor < ceiling; a floor below 1.01 is raised to it
// when the centre is estimated. interval: false leaves nu_low = nu_high = nu and saves half the
// fits. When a fit fails its reason is in `fit` and the numbers must not be used.
MissingLikelihood fit_missing_likelihood(const Eigen::Ref<const Eigen::MatrixXd>& samples,
                                         const Eigen::Ref<const Eigen::ArrayXd>& mass,
                                         const MissingSettings& settings, double floor,
                                         double ceiling, bool interval = true,
                                         const MissingStart& start = {});

}  // namespace tailweir

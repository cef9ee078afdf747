// Degrees of freedom (nu) of a multivariate t from one completed scatter fit: estimators,
// intervals.
//
// Two ways in. The streaming way reads the arrays that a fixed-point pass leaves behind (FitView)
// and costs no matrix work. The cold way (estimate_nu) takes the samples, makes the fits it needs
// and exists for replay, comparison and tests.
//
// Published sources: likelihood by ECME, Liu & Rubin, "ML estimation of the t distribution using EM
// and its extensions, ECM and ECME", Statistica Sinica 5, 1995; POP, "Improved estimation of the
// degree of freedom parameter of multivariate t-distribution", EUSIPCO 2021; trace ratio,
// "Shrinking the eigenvalues of M-estimators of covariance matrix", IEEE Trans. Signal Processing
// 69, 2021; information, Lange, Little & Taylor, "Robust statistical modeling using the t
// distribution", J. Amer. Statist. Assoc. 84, 1989. The leave-one-out scaled-F posterior is derived
// in core/tail/README.md. Thread rule: pure functions; a workspace belongs to one caller at a time.
#pragma once

#include <Eigen/Core>

#include "core/settings.h"

namespace tailweir::tail {

enum class NuStatus {
  fixed,          // given by the settings
  estimated,      // inside (floor, ceiling) and supported by the data
  at_floor,       // the estimate is held at the floor
  at_ceiling,     // no sign of a tail heavier than the normal: nu is the ceiling
  not_identified  // too few samples or degenerate distances: nu is the prior's or the last value
};

struct NuEstimate {
  double nu = 0;      // in [floor, ceiling]
  double nu_low = 0;  // central 95% interval, nu_low <= nu <= nu_high
  double nu_high = 0;
  double unblended = 0;           // leave_one_out: before the light-tail blend (nu elsewhere)
  double standard_error_log = 0;  // asymptotic standard error of ln nu; +infinity when unknown
  double effective_channels = 0;  // p_e of the last pass (p where the method has none)
  NuStatus status = NuStatus::not_identified;
};

// What a completed fixed-point pass at nu0 left behind, per sample of the window.
struct FitView {
  Eigen::Ref<const Eigen::ArrayXd> mass;      // v_i >= 0, sum 1
  Eigen::Ref<const Eigen::ArrayXd> weight;    // u_i = (p + nu0)/(nu0 + d_i)
  Eigen::Ref<const Eigen::ArrayXd> distance;  // d_i >= 0, squared Mahalanobis at the fit
  Index channels = 0;                         // p
  double nu0 = 4;                             // nu of the fit
  bool centre_estimated = false;
  // |o_i|, n values, when entries are missing: for likelihood_step only; nullptr: all p.
  const double* observed = nullptr;
};

// Buffers of the leave-one-out pass, sized once for n samples; no allocation after that.
struct Workspace {
  explicit Workspace(Index samples_at_most = 0);
  Eigen::ArrayXd delta;          // corrected leave-one-out distances, n
  Eigen::ArrayXd scratch;        // n
  Eigen::ArrayXd log_posterior;  // one value a grid point
};

// Points of the posterior's grid: log-spaced nu from 0.3 to 1000.
constexpr Index kGridPoints = 121;
double grid_nu(Index k);

// One leave-one-out scaled-F posterior pass with the light-tail blend ("LOO-F"), on the full grid
// of 121 nu (previous == nullptr) or on every k-th point around the previous estimate's interval,
// with the rest interpolated: a fraction of the cost, the same to 1e-3 in ln nu. Falls back to the
// full grid when the mass runs off the narrowed one. n >= 2. Status not_identified when the
// distances are degenerate (all zero, not finite) - nu is then the previous one, or the geometric
// middle of floor and ceiling - and when the standard error of ln nu is above 1 at a nu below 30.
// O(n) per grid point.
NuEstimate leave_one_out(const FitView& fit, const NuSettings& settings, Workspace& workspace,
                         const NuEstimate* previous = nullptr);

// Weight of the unblended estimate in the blend: 1 for nu <= 5, 0 from nu = 10, linear in 1/nu.
// Chosen in the nu study (tests/bench/nu_study.cpp, core/tail/README.md): of the switches between
// 3-6 and 8-12 the one with the least mean square error at nu = 3..6 that costs under 2% at 10.
double heavy_tail_share(double nu);

// Same pass with delta above its weighted (1 - f) quantile censored, f = 0.05: what nu would be if
// the largest distances were outliers rather than tail. No blend.
NuEstimate leave_one_out_censored(const FitView& fit, const NuSettings& settings,
                                  Workspace& workspace);

// The corrected leave-one-out distances alone, into workspace.delta; returns p_e.
double leave_one_out_distances(const FitView& fit, Workspace& workspace);

// The light-tail moment estimate nu_M that the blend uses, from nu_start.
double light_tail_moment(const FitView& fit, double nu_start);

// nu that maximises the t likelihood with scatter and centre held at the fit (one ECME step), in
// [floor, ceiling]. Repeating fit and step converges to the joint maximum. interval: profile, from
// the held fit.
NuEstimate likelihood_step(const FitView& fit, const NuSettings& settings);

// POP from one fit: theta = (1 - p/n) mean_i of the leave-one-out distances / p, nu = 2
// theta/(theta - 1). For unequal masses 1 - p/n becomes 1/g, g the root of sum v g/(1 + v p g) = 1.
NuEstimate pop_step(const FitView& fit, const NuSettings& settings);

// Kurtosis start 2/kappa + 4, kappa one third of the channels' mean excess kurtosis. samples p x n.
NuEstimate kurtosis(const Eigen::Ref<const Eigen::MatrixXd>& samples,
                    const Eigen::Ref<const Eigen::ArrayXd>& mass, const CentreSettings& centre,
                    const NuSettings& settings);

// Trace ratio from one fit: theta = trace(sample covariance)/trace(M-estimate of scatter).
NuEstimate trace_ratio_step(double covariance_trace, double scatter_trace, Index channels,
                            const NuSettings& settings);

// E[u(d) d0]/p: by how much a scatter of n samples at its fixed point is too large, d0 ~ p F(p,
// nu), d the positive root of d^2 + d (nu + (p + nu) delta/n - delta) - delta nu = 0, delta = gamma
// d0. Worth dividing out when p/n >= 0.4. Quadrature, about 20 us. n > p.
double finite_sample_scale(double channels, double nu, double n);
// gamma: root of E[u(d) d] = p in the same notation.
double finite_sample_gamma(double channels, double nu, double n);

// Cold estimate by settings.method, making every fit it needs. samples p x n, mass n (any scale).
// n <= p or p/n > .75: leave_one_out works on interleaved channel blocks. Allocates.
NuEstimate estimate_nu(const Eigen::Ref<const Eigen::MatrixXd>& samples,
                       const Eigen::Ref<const Eigen::ArrayXd>& mass, const CentreSettings& centre,
                       const NuSettings& settings);

}  // namespace tailweir::tail

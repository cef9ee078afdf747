// Corrected leave-one-out distances: what each sample's distance would be had it not taken part in
// the fit, to second order in its leverage. Derivation: core/tail/README.md.
#include <algorithm>
#include <cmath>

#include "core/tail/tail.h"

namespace tailweir::tail {

Workspace::Workspace(Index samples_at_most)
    : delta(samples_at_most), scratch(samples_at_most), log_posterior(kGridPoints) {}

double leave_one_out_distances(const FitView& fit, Workspace& workspace) {
  const Index n = fit.mass.size();
  const double p = static_cast<double>(fit.channels);
  const double nu = fit.nu0;
  double sum_h = 0, sum_h2 = 0, sum_omega = 0, c = 0;
  for (Index i = 0; i < n; ++i) {
    const double omega = fit.mass(i) * fit.weight(i);
    const double d = fit.distance(i);
    const double h = omega * d;
    sum_omega += omega;
    sum_h += h;
    sum_h2 += h * h;
    c += h * d / (nu + d);
  }
  c /= p * (p + 2);
  const double effective = sum_h > 0 ? p * (1 - sum_h2 / sum_h) : 0;  // p_e
  const double t = effective / p;
  const double a = 1 / (1 - 2 * c);
  const double q = 1 - (p + 2) * c;
  const double a1 = 1 + (a - 1) * t;
  for (Index i = 0; i < n; ++i) {
    const double v = fit.mass(i);
    const double omega = v * fit.weight(i);
    const double h = omega * fit.distance(i);
    const double b = t * (c * a * h - v) / q;
    const double left = 1 - a1 * h - (fit.centre_estimated ? omega / sum_omega : 0);
    workspace.delta(i) = fit.distance(i) * std::exp(b) / std::max(left, .05 * (1 - h));
  }
  return effective;
}

}  // namespace tailweir::tail

// Alert thresholds for a wanted mean number of samples between false alerts.
//
// h = h5000 + slope ln(ARL/5000), from shipped tables (thresholds_table.h) over channels and, for
// tail and scale, nu: linear in ln p and ln nu, held at the edges. The tail table was simulated
// (calibration.h), the scale table is exact at its knots (cusum_chain.h), the shape table was
// simulated for a monitor of default settings. mean_samples > 0: wanted mean number of samples
// between false raises of the one direction. Thread rule: pure functions, no allocation.
#pragma once

#include "core/detect/tail_bank.h"

namespace tailweir::detect {

// nu: of the base of the direction's bank.
double tail_threshold(double channels, double nu, TailDirection direction, double mean_samples);

// CUSUM of lf(y - a) - lf(y), a = +-2 ln 1.5, for D/p ~ F(p, nu).
double scale_threshold(double channels, double nu, bool up, double mean_samples);

// Upper threshold of Q.
double shape_threshold(double channels, double mean_samples);

}  // namespace tailweir::detect

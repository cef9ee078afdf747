#include "core/detect/mixed_tail.h"

#include <algorithm>
#include <boost/math/distributions/chi_squared.hpp>
#include <cassert>
#include <cmath>

#include "core/student/student.h"

namespace tailweir::detect {

namespace {
constexpr double kGaussian = 1e6;   // k from which the closed form is used
constexpr double kFewDegrees = 10;  // m below which 17 nodes are too coarse
}  // namespace

MixedTail::MixedTail(double m) : m_(m), nodes_(m < kFewDegrees ? 65 : 17) {
  assert(m > 0);
  const boost::math::chi_squared_distribution<double> chi2(m);
  const double low = std::log(boost::math::quantile(chi2, 1e-9));
  const double high = std::log(boost::math::quantile(boost::math::complement(chi2, 1e-6)));
  const double step = (high - low) / (nodes_ - 1);
  for (int i = 0; i < nodes_; ++i) {
    const auto at = static_cast<std::size_t>(i);
    const double log_c = low + step * i;
    const double c = std::exp(log_c);
    const double log_density = .5 * m * (log_c - std::log(2.)) - .5 * c - std::lgamma(.5 * m);
    scale_[at] = c / m;
    weight_[at] = step * std::exp(log_density) * (i == 0 || i == nodes_ - 1 ? .5 : 1);
  }
}

double MixedTail::probability(double ratio, double g, double k) const {
  if (!(ratio > 0)) return 1;
  if (k >= kGaussian) return student::tail_probability(ratio * g, g, m_);
  double sum = 0;
  for (int i = 0; i < nodes_; ++i) {
    const auto at = static_cast<std::size_t>(i);
    sum += weight_[at] * student::tail_probability(ratio * scale_[at] * g, g, k);
  }
  return std::min(sum, 1.);
}

PredictiveTail::PredictiveTail(double channels, double samples, double nu, bool centre_estimated)
    : channels_(channels), samples_(samples), nu_(nu), centre_estimated_(centre_estimated) {
  assert(channels > 0 && nu > 0);
  const double m = centre_estimated ? samples - channels : samples - channels + 1;
  if (!(m > 0)) return;
  tail_ = MixedTail(m);
  ratio_per_distance_ = m / ((centre_estimated ? samples + 1 : samples) * channels);
  cache_.forget(std::log(channels));
}

double PredictiveTail::exact(double distance) const {
  if (!defined()) return std::nan("");
  return tail_.probability(distance * ratio_per_distance_, channels_, nu_);
}

double PredictiveTail::p_value(double distance) {
  if (!defined()) return std::nan("");
  return cache_.value(distance, [this](double d) { return exact(d); });
}

}  // namespace tailweir::detect

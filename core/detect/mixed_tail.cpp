#include "core/detect/mixed_tail.h"

#include <algorithm>
#include <boost/math/distributions/chi_squared.hpp>
#include <cassert>
#include <cmath>

#include "core/student/student.h"

namespace tailweir::detect {

namespace {
constexpr double kCell = .125;      // spacing of the remembered values in ln D
constexpr int kCells = 160;         // from e^-10 p to e^10 p
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
  first_ = std::log(channels) - kCell * kCells / 2;
  remembered_.assign(kCells, 1);
}

double PredictiveTail::exact(double distance) const {
  if (!defined()) return std::nan("");
  return tail_.probability(distance * ratio_per_distance_, channels_, nu_);
}

double PredictiveTail::value_at(int number) {
  double& value = remembered_[static_cast<std::size_t>(number)];
  if (value > 0) value = std::log(exact(std::exp(first_ + kCell * number)));
  return value;
}

double PredictiveTail::p_value(double distance) {
  if (!defined()) return std::nan("");
  if (!(distance > 0)) return 1;
  const double place = (std::log(distance) - first_) / kCell;
  if (!(place >= 1 && place < kCells - 2)) return exact(distance);
  const int number = static_cast<int>(place);
  const double s = place - number;
  // Cubic Lagrange interpolation on the four values around.
  const double before = value_at(number - 1), left = value_at(number);
  if (left < std::log(kExactBelow)) return exact(distance);
  const double right = value_at(number + 1), after = value_at(number + 2);
  const double log_p = -before * s * (s - 1) * (s - 2) / 6 +
                       left * (s + 1) * (s - 1) * (s - 2) / 2 - right * (s + 1) * s * (s - 2) / 2 +
                       after * (s + 1) * s * (s - 1) / 6;
  const double p = std::exp(std::min(log_p, 0.));
  return p < kExactBelow ? exact(distance) : p;
}

}  // namespace tailweir::detect

#include "core/detect/cusum_chain.h"

#include <Eigen/LU>
#include <cassert>
#include <cmath>

#include "core/student/student.h"

namespace tailweir::detect {

namespace {
double chain_run_length(const std::function<double(double)>& below, double h, int states) {
  const double w = 2 * h / (2 * states - 1);
  // P(step lands within half a width of k widths), k = -(N-1)..N-1, from 2N - 1 differences.
  Eigen::VectorXd edge(2 * states);
  for (int k = 0; k < 2 * states; ++k) edge[k] = below((k - states + .5) * w);
  Eigen::MatrixXd matrix(states, states);
  for (int i = 0; i < states; ++i) {
    for (int j = 1; j < states; ++j) {
      const int k = j - i + states;  // edge[k] is (j - i + .5) w
      matrix(i, j) = (i == j ? 1. : 0.) - (edge[k] - edge[k - 1]);
    }
    matrix(i, 0) = (i == 0 ? 1. : 0.) - edge[states - i];
  }
  const Eigen::VectorXd run = matrix.partialPivLu().solve(Eigen::VectorXd::Ones(states));
  return run[0];
}
}  // namespace

double cusum_run_length(const std::function<double(double)>& below, double h, int states) {
  assert(h > 0 && states >= 2);
  const double coarse = chain_run_length(below, h, states);
  const double fine = chain_run_length(below, h, 2 * states);
  return (4 * fine - coarse) / 3;
}

double cusum_threshold(const std::function<double(double)>& below, double mean_samples,
                       int states) {
  // ln ARL grows nearly linearly in h: regula falsi, kept inside a bracket.
  const double target = std::log(mean_samples);
  const auto excess = [&](double h) {
    return std::log(cusum_run_length(below, h, states)) - target;
  };
  double low = .05, high = 60;
  double at = std::max(1., target - 2), slope = 1;
  for (int i = 0; i < 60; ++i) {
    const double value = excess(at);
    if (std::abs(value) < 1e-6) break;
    (value > 0 ? high : low) = at;
    double next = at - value / slope;
    if (!(next > low && next < high)) next = .5 * (low + high);
    const double moved = excess(at + 1e-3) - value;
    slope = std::max(moved / 1e-3, .05);
    const double newton = at - value / slope;
    at = newton > low && newton < high ? newton : next;
  }
  return at;
}

double scale_increment_below(double z, double channels, double nu, double a, double moved) {
  // Z = -(p/2) a + ((p + nu)/2) ln((nu + D)/(nu + D e^-a)) is monotone in D; with r the ratio,
  // D = nu (r - 1)/(1 - r e^-a).
  const double log_ratio = 2 * (z + .5 * channels * a) / (channels + nu);
  const bool up = a > 0;
  const double least = up ? 0 : a, most = up ? a : 0;
  if (log_ratio <= least) return 0;
  if (log_ratio >= most) return 1;
  const double distance = nu * std::expm1(log_ratio) / -std::expm1(log_ratio - a);
  const double tail = student::tail_probability(distance * std::exp(-moved), channels, nu);
  return up ? 1 - tail : tail;
}

}  // namespace tailweir::detect

#include "tests/reference/reference.h"

#include <Eigen/Cholesky>
#include <algorithm>
#include <boost/math/special_functions/beta.hpp>
#include <cmath>
#include <numeric>
#include <vector>

namespace tailweir::reference {

Fit fit(const Eigen::MatrixXd& samples, const Eigen::ArrayXd& mass, double nu,
        bool estimate_centre) {
  const Eigen::Index p = samples.rows(), n = samples.cols();
  const Eigen::ArrayXd v = mass / mass.sum();
  Fit f;
  f.centre = estimate_centre ? Eigen::VectorXd(samples * v.matrix()) : Eigen::VectorXd::Zero(p);
  Eigen::MatrixXd x = samples.colwise() - f.centre;
  f.scatter = x * v.matrix().asDiagonal() * x.transpose();
  for (int k = 0; k < 100000; ++k) {
    x = samples.colwise() - f.centre;
    const Eigen::MatrixXd solved = f.scatter.llt().solve(x);
    f.distance = (x.array() * solved.array()).colwise().sum().transpose();
    f.weight = (static_cast<double>(p) + nu) / (nu + f.distance);
    const Eigen::ArrayXd w = v * f.weight;
    const Eigen::VectorXd centre =
        estimate_centre ? Eigen::VectorXd(samples * w.matrix() / w.sum()) : f.centre;
    const Eigen::MatrixXd y = samples.colwise() - centre;
    const Eigen::MatrixXd scatter = y * w.matrix().asDiagonal() * y.transpose() / w.sum();
    const double change =
        (scatter - f.scatter).cwiseAbs().maxCoeff() / scatter.diagonal().maxCoeff() +
        (centre - f.centre).cwiseAbs().maxCoeff() / std::sqrt(scatter.diagonal().maxCoeff());
    f.scatter = scatter;
    f.centre = centre;
    if (change < 1e-15) break;
  }
  for (Eigen::Index i = 0; i < n; ++i) {
    const Eigen::VectorXd c = samples.col(i) - f.centre;
    f.distance(i) = c.dot(f.scatter.llt().solve(c));
  }
  f.weight = (static_cast<double>(p) + nu) / (nu + f.distance);
  return f;
}

Posterior leave_one_out(const Fit& fit, const Eigen::ArrayXd& mass, Eigen::Index channels,
                        double nu0, bool centre_estimated, double rate, Eigen::ArrayXd* delta_out) {
  const Eigen::Index n = mass.size();
  const double p = static_cast<double>(channels);
  const Eigen::ArrayXd v = mass / mass.sum();
  const Eigen::ArrayXd omega = v * fit.weight;
  const Eigen::ArrayXd& d = fit.distance;
  const Eigen::ArrayXd h = omega * d;
  const double pe = p * (1 - h.square().sum() / h.sum());
  const double t = pe / p;
  const double c = (omega * d.square() / (nu0 + d)).sum() / (p * (p + 2));
  const double a = 1 / (1 - 2 * c), q = 1 - (p + 2) * c, a1 = 1 + (a - 1) * t;
  Eigen::ArrayXd delta(n);
  for (Eigen::Index i = 0; i < n; ++i) {
    const double b = t * (c * a * h(i) - v(i)) / q;
    const double left = 1 - a1 * h(i) - (centre_estimated ? omega(i) / omega.sum() : 0);
    delta(i) = d(i) * std::exp(b) / std::max(left, .05 * (1 - h(i)));
  }
  if (delta_out != nullptr) *delta_out = delta;
  const std::size_t kPoints = 121;
  std::vector<double> nu(kPoints), lp(kPoints);
  for (std::size_t k = 0; k < kPoints; ++k) {
    nu[k] = .3 * std::pow(1000 / .3, static_cast<double>(k) / 120.);
    double low = -200, high = 200;
    for (int j = 0; j < 200; ++j) {
      const double e = .5 * (low + high);
      const double share = (v * delta / (delta + std::exp(e))).sum();
      (share > pe / (pe + nu[k]) ? low : high) = e;
    }
    const double e = .5 * (low + high);
    const double l = std::lgamma((pe + nu[k]) / 2) - std::lgamma(nu[k] / 2) - std::lgamma(pe / 2) -
                     pe * e / 2 + pe / 2 * (v * delta.log()).sum() -
                     (pe + nu[k]) / 2 * (v * (1 + delta * std::exp(-e)).log()).sum();
    lp[k] = l / v.square().sum() - std::log(pe * nu[k] / (pe + nu[k] + 2)) / 2 -
            2 * std::log(nu[k]) - rate / nu[k];
  }
  double top = lp[0];
  for (const double value : lp) top = std::max(top, value);
  double sum = 0, inverse = 0;
  std::vector<double> cumulative(kPoints, 0);
  for (std::size_t k = 0; k < kPoints; ++k) {
    sum += std::exp(lp[k] - top);
    inverse += std::exp(lp[k] - top) / nu[k];
    if (k > 0) {
      cumulative[k] = cumulative[k - 1] + .5 * (std::exp(lp[k] - top) + std::exp(lp[k - 1] - top));
    }
  }
  const auto quantile = [&](double level) {
    for (std::size_t k = 1; k < kPoints; ++k) {
      const double from = cumulative[k - 1] / cumulative[kPoints - 1];
      const double to = cumulative[k] / cumulative[kPoints - 1];
      if (to >= level) {
        const double share = (level - from) / (to - from);
        return std::exp(std::log(nu[k - 1]) + share * (std::log(nu[k]) - std::log(nu[k - 1])));
      }
    }
    return nu[kPoints - 1];
  };
  Posterior result{pe, sum / inverse, quantile(.025), quantile(.975), 0};
  // Light-tail moment and blend, equal masses or small ones.
  const bool equal = v.maxCoeff() == v.minCoeff();
  result.blended = result.nu;
  if (!(equal ? p / static_cast<double>(n) <= .75 : p * v.maxCoeff() <= .3)) return result;
  double glow = 1, ghigh = 1e9;
  for (int j = 0; j < 300; ++j) {
    const double g = std::sqrt(glow * ghigh);
    ((v * g / (1 + v * p * g)).sum() < 1 ? glow : ghigh) = g;
  }
  const double g = std::sqrt(glow * ghigh);
  double m = result.nu;
  for (int round = 0; round < 300; ++round) {
    double low = -50, high = 50;
    for (int j = 0; j < 200; ++j) {
      const double s = .5 * (low + high);
      ((v * d / (m * std::exp(s) + d)).sum() > p / (p + m) ? low : high) = s;
    }
    const Eigen::ArrayXd d1 = d / std::exp(.5 * (low + high));
    const Eigen::ArrayXd om = v * (p + m) / (m + d1);
    Eigen::ArrayXd left = 1 - om * d1;
    if (centre_estimated) left -= om / om.sum();
    const double theta = (v * d1 / left).sum() / (p * g);
    const double next = theta > 1 ? std::min(std::max(2 * theta / (theta - 1), 2.01), 1000.) : 1000;
    const bool done = std::abs(next - m) < 1e-8 * m;
    m = next;
    if (done) break;
  }
  const double share = std::min(std::max((1 / result.nu - .1) / .1, 0.), 1.);
  result.blended = 1 / (1 / m + share * (1 / result.nu - 1 / m));
  return result;
}

double censored_nu(const Eigen::ArrayXd& delta, const Eigen::ArrayXd& mass, double pe, double share,
                   double rate) {
  const Eigen::ArrayXd v = mass / mass.sum();
  // Censors from the top while the censored mass stays within the share.
  std::vector<Eigen::Index> order(static_cast<std::size_t>(delta.size()));
  std::iota(order.begin(), order.end(), Eigen::Index{0});
  std::sort(order.begin(), order.end(),
            [&](Eigen::Index a, Eigen::Index b) { return delta(a) > delta(b); });
  double above = 0;
  std::size_t first = 0;
  while (above + v(order[first]) <= share) above += v(order[first++]);
  const double limit = delta(order[first]);
  const auto log_likelihood = [&](double nu, double e) {
    double sum =
        above * std::log(boost::math::ibetac(pe / 2, nu / 2, limit / (limit + std::exp(e))));
    for (std::size_t k = first; k < order.size(); ++k) {
      const double y = std::log(delta(order[k])) - e;
      sum += v(order[k]) * (std::lgamma((pe + nu) / 2) - std::lgamma(pe / 2) - std::lgamma(nu / 2) +
                            pe / 2 * y - (pe + nu) / 2 * std::log1p(std::exp(y)));
    }
    return sum;
  };
  std::vector<double> lp, grid;
  for (int k = 0; k < 121; ++k) {
    const double nu = .3 * std::pow(1000 / .3, k / 120.);
    double low = -20, high = 20;
    const double golden = .6180339887498949;
    for (int j = 0; j < 60; ++j) {
      const double a = high - golden * (high - low), b = low + golden * (high - low);
      (log_likelihood(nu, a) > log_likelihood(nu, b) ? high : low) =
          log_likelihood(nu, a) > log_likelihood(nu, b) ? b : a;
    }
    grid.push_back(nu);
    lp.push_back(log_likelihood(nu, .5 * (low + high)) / v.square().sum() -
                 std::log(pe * nu / (pe + nu + 2)) / 2 - 2 * std::log(nu) - rate / nu);
  }
  const double top = *std::max_element(lp.begin(), lp.end());
  double sum = 0, inverse = 0;
  for (std::size_t k = 0; k < lp.size(); ++k) {
    sum += std::exp(lp[k] - top);
    inverse += std::exp(lp[k] - top) / grid[k];
  }
  return sum / inverse;
}

Eigen::MatrixXd wave_samples(Eigen::Index p, Eigen::Index n, bool shifted) {
  Eigen::MatrixXd x(p, n);
  for (Eigen::Index i = 0; i < n; ++i) {
    for (Eigen::Index j = 0; j < p; ++j) {
      const double a = static_cast<double>(i), b = static_cast<double>(j);
      x(j, i) = std::exp(1.2 * std::sin(3.1 * a + 1)) * std::sin(12.9 * a + 7.3 * b + .4 * a * b) +
                (shifted ? .5 * (b + 1) : 0);
    }
  }
  return x;
}

Eigen::MatrixXd t_samples(Eigen::Index p, Eigen::Index n, double nu, std::mt19937_64& bits) {
  std::normal_distribution<double> normal;
  std::gamma_distribution<double> gamma(nu / 2, 2 / nu);
  Eigen::MatrixXd x(p, n);
  for (Eigen::Index i = 0; i < n; ++i) {
    const double scale = 1 / std::sqrt(gamma(bits));
    double before = 0;
    for (Eigen::Index j = 0; j < p; ++j) {
      before = j == 0 ? normal(bits) : .6 * before + .8 * normal(bits);
      x(j, i) = before * scale;
    }
  }
  return x;
}

}  // namespace tailweir::reference

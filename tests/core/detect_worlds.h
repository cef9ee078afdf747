// Invented data for the detection tests and studies: samples of a multivariate t and what
// volatility may do to them. Test use only; the library's own simulations have their own generator.
#pragma once

#include <Eigen/Core>
#include <cmath>
#include <cstdint>
#include <random>

namespace tailweir::detect_test {

class SampleGenerator {
 public:
  explicit SampleGenerator(std::uint64_t seed) : random_(seed) {}
  double normal() { return normal_(random_); }
  double chi_square(double degrees) {
    return std::gamma_distribution<double>(.5 * degrees, 2)(random_);
  }
  // ln D with D/p ~ F(p, nu).
  double log_distance(double p, double nu) {
    const double mixing = nu / chi_square(nu);
    return std::log(mixing * chi_square(p));
  }
  // x ~ t_p(0, I, nu); also the part of the first channel in D.
  void sample(double nu, Eigen::VectorXd& x) {
    const double root = std::sqrt(nu / chi_square(nu));
    for (double& value : x) value = root * normal();
  }

 private:
  std::mt19937_64 random_;
  std::normal_distribution<double> normal_;
};

enum class World { constant, doubled, halved, sine, garch_one, garch_all };
inline constexpr World kWorlds[] = {World::constant, World::doubled,   World::halved,
                                    World::sine,     World::garch_one, World::garch_all};
inline const char* name(World world) {
  switch (world) {
    case World::constant:
      return "constant";
    case World::doubled:
      return "doubled";
    case World::halved:
      return "halved";
    case World::sine:
      return "sine";
    case World::garch_one:
      return "garch, one channel";
    case World::garch_all:
      break;
  }
  return "garch, whole panel";
}

// Volatility sigma_t of a world: doubled and halved switch when `after` becomes true; sine is
// ln sigma = ln 2 sin(2 pi t/1000); GARCH(.02, .1, .88): sigma^2 <- .02 + .1 e^2 + .88 sigma^2 with
// e^2 the squared value, at unit variance, of one channel or the mean over all channels.
class Volatility {
 public:
  Volatility(World world, double p, double nu) : world_(world), p_(p), nu_(nu) {}

  // y = ln D of the next sample, scatter known and constant.
  double log_distance(SampleGenerator& random, bool after) {
    const double mixing = nu_ / random.chi_square(nu_);
    const double z = random.normal();
    const double one = mixing * z * z;
    const double all = one + (p_ > 1 ? mixing * random.chi_square(p_ - 1) : 0);
    const double y = std::log(all) + log_variance(after);
    advance(one, all);
    return y;
  }
  // The next sample in full, scatter I.
  void sample(SampleGenerator& random, bool after, Eigen::VectorXd& x) {
    random.sample(nu_, x);
    const double one = x[0] * x[0], all = x.squaredNorm();
    x *= std::exp(.5 * log_variance(after));
    advance(one, all);
  }
  void set_nu(double nu) { nu_ = nu; }

 private:
  double log_variance(bool after) const {
    const double ln2 = std::log(2.);
    switch (world_) {
      case World::constant:
        return 0;
      case World::doubled:
        return after ? 2 * ln2 : 0;
      case World::halved:
        return after ? -2 * ln2 : 0;
      case World::sine:
        return 2 * ln2 * std::sin(2 * M_PI * static_cast<double>(t_) / 1000);
      case World::garch_one:
      case World::garch_all:
        break;
    }
    return std::log(variance_);
  }
  void advance(double one, double all) {
    ++t_;
    const double unit = (nu_ - 2) / nu_;
    const double square = world_ == World::garch_one ? one * unit : all * unit / p_;
    variance_ = .02 + (.1 * square + .88) * variance_;
  }
  World world_;
  double p_, nu_;
  double variance_ = 1;
  std::int64_t t_ = 0;
};

}  // namespace tailweir::detect_test

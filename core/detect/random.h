// Counter-based random numbers for the calibrations: the k-th number of a stream depends on (seed,
// stream, k) alone, so simulations give the same thresholds however they are cut into pieces.
//
// The mixer is that of SplitMix64 (Steele, Lea & Flood, OOPSLA 2014); gamma variates by Marsaglia &
// Tsang, ACM Trans. Math. Software 26, 2000. Not for cryptography. Thread rule: one owner.
#pragma once

#include <cmath>
#include <cstdint>

namespace tailweir::detect {

class CounterRandom {
 public:
  CounterRandom(std::uint64_t seed, std::uint64_t stream)
      : key_(mix(seed + 0x9e3779b97f4a7c15U) ^ mix(stream * 0xd1342543de82ef95U + 1)) {}

  std::uint64_t bits() { return mix(key_ + 0x9e3779b97f4a7c15U * ++counter_); }
  // Uniform on (0, 1).
  double uniform() { return (static_cast<double>(bits() >> 11U) + .5) * 0x1p-53; }
  double normal() {  // polar method (Marsaglia & Bray, 1964), one of the pair thrown away
    for (;;) {
      const double u = 2 * uniform() - 1, v = 2 * uniform() - 1;
      const double s = u * u + v * v;
      if (s > 0 && s < 1) return u * std::sqrt(-2 * std::log(s) / s);
    }
  }
  // ln of a chi-square variate with `degrees` > 0 degrees of freedom.
  double log_chi_square(double degrees) {
    double shape = .5 * degrees, boost = 0;
    if (shape < 1) {
      boost = std::log(uniform()) / shape;
      shape += 1;
    }
    const double d = shape - 1. / 3, c = 1 / std::sqrt(9 * d);
    for (;;) {
      const double x = normal();
      const double root = 1 + c * x;
      if (root <= 0) continue;
      const double v = root * root * root;
      if (std::log(uniform()) < .5 * x * x + d - d * v + d * std::log(v)) {
        return std::log(2 * d * v) + boost;
      }
    }
  }
  // y = ln D with D/p ~ F(p, nu).
  double log_distance(double channels, double nu) {
    return log_chi_square(channels) - log_chi_square(nu) + std::log(nu);
  }

 private:
  static std::uint64_t mix(std::uint64_t z) {
    z = (z ^ (z >> 30U)) * 0xbf58476d1ce4e5b9U;
    z = (z ^ (z >> 27U)) * 0x94d049bb133111ebU;
    return z ^ (z >> 31U);
  }
  std::uint64_t key_;
  std::uint64_t counter_ = 0;
};

}  // namespace tailweir::detect

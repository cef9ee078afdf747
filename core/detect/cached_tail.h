// A tail probability as a function of distance, remembered on a grid and interpolated between: most
// samples are ordinary, and need no incomplete beta function of their own.
//
// ln P is remembered at ln D = first + number/8, computed when first needed, interpolated by the
// cubic through four neighbours (relative error below 1e-4 for the tails used here). Below
// kExactBelow the exact value is computed, so that no decision hangs on an interpolation. Thread
// rule: one owner. No allocation after construction.
#pragma once

#include <algorithm>
#include <array>
#include <cmath>

namespace tailweir::detect {

class CachedTail {
 public:
  static constexpr double kExactBelow = .02;

  CachedTail() { forget(0); }
  // Forgets everything; the grid is centred on ln D = middle.
  void forget(double middle) {
    remembered_.fill(kUnknown);
    first_ = middle - kCell * kCells / 2;
  }

  // exact(distance): the probability itself, > 0 where the grid reaches.
  template <typename Exact>
  double value(double distance, const Exact& exact) {
    if (!(distance > 0)) return 1;
    const double place = (std::log(distance) - first_) / kCell;
    if (!(place >= 1 && place < kCells - 2)) return exact(distance);
    const int number = static_cast<int>(place);
    const double s = place - number;
    const double left = at(number, exact);
    if (left < kLogExactBelow) return exact(distance);
    const double before = at(number - 1, exact), right = at(number + 1, exact),
                 after = at(number + 2, exact);
    // Cubic Lagrange interpolation on the four values around.
    const double log_p = -before * s * (s - 1) * (s - 2) / 6 +
                         left * (s + 1) * (s - 1) * (s - 2) / 2 -
                         right * (s + 1) * s * (s - 2) / 2 + after * (s + 1) * s * (s - 1) / 6;
    return log_p < kLogExactBelow ? exact(distance) : std::exp(std::min(log_p, 0.));
  }

 private:
  static constexpr double kCell = .125;
  static constexpr int kCells = 160;
  static constexpr double kUnknown = 1;
  static constexpr double kLogExactBelow = -3.912023005428146;  // ln kExactBelow

  template <typename Exact>
  double at(int number, const Exact& exact) {
    double& value = remembered_[static_cast<std::size_t>(number)];
    if (value == kUnknown) value = std::log(exact(std::exp(first_ + kCell * number)));
    return value;
  }

  double first_ = 0;
  std::array<double, kCells> remembered_{};
};

}  // namespace tailweir::detect

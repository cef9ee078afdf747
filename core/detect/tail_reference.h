// The tail monitor's own long memory: the last ln D, and the nu that explains them best once their
// volatility has been filtered away.
//
//   nu0 = argmax over nu of sum_t l_nu(t),  SE(ln nu0) = 1/(nu0 sqrt(M I_eff(p, nu0)))
// with l the filter evidence of scale_filter.h and I_eff of student.h (scale profiled). Each
// direction fits with its own dynamics, so that its base is the best description of quiet data in
// its own eyes, clustered or not. Guard: the base is nu0 e^(-1.28 SE) (heavier) or nu0 e^(+1.28 SE)
// (lighter), nu0 taken at most 30, so that false alerts are as rare as asked with 90% confidence.
// Published source of the information: Lange, Little & Taylor, J. Amer. Statist. Assoc. 84, 1989.
//
// A pass over the memory runs three filters (nu and a factor e^.2 either side) over a few stored
// values a sample, then takes one Newton step. Thread rule: one owner. No allocation after
// construction.
#pragma once

#include <array>
#include <cstdint>
#include <vector>

#include "core/detect/scale_filter.h"

namespace tailweir::detect {

// A ring of the last values of y = ln D, which can forget its newest ones.
struct ValueRing {
  std::vector<double> value;
  std::int64_t pushed = 0;  // values ever pushed, less those forgotten
  std::int64_t oldest = 0;  // values before this one are gone

  explicit ValueRing(std::int64_t capacity = 0) : value(static_cast<std::size_t>(capacity)) {}
  std::int64_t capacity() const { return static_cast<std::int64_t>(value.size()); }
  void push(double y);
  double at(std::int64_t number) const {
    return value[static_cast<std::size_t>(number % capacity())];
  }
  void forget_newest(std::int64_t count);
  std::int64_t held() const { return pushed - oldest; }
  void clear() { oldest = pushed; }
};

double guard_standard_error(double channels, double nu, double samples);
inline constexpr double kLightestBase = 30;  // a lighter tail is as good as normal

// Plain state, to be stored and restored as it is.
struct NuFitState {
  double nu = 0;  // current value; 0: none
  int passes = 0;
  bool running = false;
  int built = 0;  // tables of this pass that exist
  std::int64_t begin = 0, end = 0, at = 0;
  std::array<FilterState, 3> filter;
  std::array<double, 3> sum{};
};

class NuFit {
 public:
  NuFit(double channels, const FilterSettings& dynamics);
  // Starts a pass over [begin, end) of a ring, from nu. The first three visit() build a table each.
  void begin(double nu, std::int64_t begin, std::int64_t end);
  // Visits up to `count` values; true when the pass ended and nu() has moved.
  bool visit(const ValueRing& ring, int count);
  bool running() const { return state_.running; }
  double nu() const { return state_.nu; }
  int passes() const { return state_.passes; }
  void forget() { state_ = NuFitState(); }
  const NuFitState& state() const { return state_; }
  void restore(const NuFitState& state);

 private:
  void build_next();
  void step();
  double channels_;
  FilterSettings dynamics_;
  FilterStep step_;
  std::array<EmissionTable, 3> table_;
  NuFitState state_;
};

}  // namespace tailweir::detect

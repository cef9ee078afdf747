// A Bayes filter on the log-scale of the distances, for one value of nu: what makes the tail
// monitor blind to volatility.
//
// With y = ln D and D e^-a / p ~ F(p, nu), the unknown log-scale a lives on the grid a_i = -4 + .2
// i, i = 0..40. Per sample
//   b_i = (1 - e)((1 - q) w_i + (q/2)(w_(i-1) + w_(i+1))) + e/G      predict (edges half-sample
//   reflected) m_i = (1 - f) exp lf(y - a_i; p, nu) + f/60                      emission l   = ln
//   sum_i b_i m_i,   w_i = b_i m_i / sum                    evidence and update.
// lf is student::log_density_of_log_distance. The floor f/60 makes absurd distances uninformative
// instead of letting one of them move the scale. Published source: Hamilton, Econometrica 57, 1989
// (the discrete filter); grid, jumps and floor are derived in core/detect/README.md.
//
// Cost: the grid step is uniform, so m_i comes from one table of exp lf: 41 neighbouring entries of
// three rows, quadratic interpolation; about 60 ns a step. No allocation after construction. Thread
// rule: an EmissionTable is immutable once built and may be shared; a ScaleFilter has one owner.
#pragma once

#include <Eigen/Core>
#include <vector>

namespace tailweir::detect {

struct FilterSettings {
  double step_sd = .05;       // sigma: standard deviation of one step of a, q = (sigma/.2)^2
  double jump = .002;         // e: chance that a jumps anywhere on the grid
  double floor_share = 1e-3;  // f: share of samples that say nothing
};

// exp lf(z; p, nu) on a fine grid of z, laid out so that the emissions of one sample are
// contiguous.
class EmissionTable {
 public:
  static constexpr int kGrid = 41;     // points of the log-scale grid
  static constexpr double kStep = .2;  // its step
  static constexpr double kReach = 4;  // its half width
  static constexpr int kPhases = 16;   // table points per grid step
  static constexpr int kPadded = 42;   // kGrid rounded up to whole packets; the rest is zero
  using Points = Eigen::Array<double, kPadded, 1>;

  EmissionTable() = default;
  // channels p > 0 (need not be whole), nu > 0. About 40 us and, as a rule, 30 kB.
  EmissionTable(double channels, double nu, double floor_share = FilterSettings().floor_share);

  // Takes the memory of the largest table (80 kB, untouched until used), so that build() never
  // allocates.
  void reserve() { values_.reserve(static_cast<std::size_t>(kMostColumns * (kPhases + 3))); }
  void build(double channels, double nu, double floor_share = FilterSettings().floor_share);

  double nu() const { return nu_; }
  bool built() const { return !values_.empty(); }

  // m_i at y, i = 0..40, last entry 0. y may be anything but NaN. Interpolation error below
  // a thousandth of m_i plus a millionth of the largest m (checked from p = 1 to 300).
  inline void emissions(double y, Points& m) const {
    double u = (y + kReach) * (1 / kStep);
    u = u < low_ ? low_ : (u > high_ ? high_ : u);
    const int whole = static_cast<int>(u + offset_) - static_cast<int>(offset_);
    const double fine = (u - whole) * kPhases;
    const int phase = static_cast<int>(fine + .5);
    const double s = fine - phase;
    const double* row = values_.data() + phase * columns_ + (last_ - whole);
    using Row = Eigen::Map<const Points>;
    m = (.5 * s * (s - 1)) * Row(row) + (1 - s * s) * Row(row + columns_) +
        (.5 * s * (s + 1)) * Row(row + 2 * columns_);
    m[kGrid] = 0;
  }

 private:
  static constexpr double kHalfSpan = 40;  // in ln D, either side of ln p
  static constexpr int kMostColumns = static_cast<int>(2 * kHalfSpan / kStep) + 3 * kPadded + 10;

  double nu_ = 0;
  int columns_ = 0;
  int last_ = 0;  // grid number of column 0: column c holds z = .2 (last - c + phase/16)
  double low_ = 0, high_ = 0, offset_ = 1 << 20;
  std::vector<double> values_;  // rows: phases -1..17
};

// State of the filter: plain values, serialisable.
struct FilterState {
  EmissionTable::Points weight;  // not normalised: divide by `total`; the last entry is 0
  double total = 1;
  FilterState() { reset(); }
  void reset() {
    weight.setConstant(1. / EmissionTable::kGrid);
    weight[EmissionTable::kGrid] = 0;
    total = 1;
  }
  double mean_log_scale() const;  // posterior mean of a
};

class FilterStep {
 public:
  explicit FilterStep(const FilterSettings& settings = {});

  // Feeds one sample; returns l, its log evidence.
  double operator()(const EmissionTable& table, double y, FilterState& state) const;

 private:
  double stay_, move_, jump_;
};

}  // namespace tailweir::detect

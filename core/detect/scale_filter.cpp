#include "core/detect/scale_filter.h"

#include <algorithm>
#include <cassert>
#include <cmath>

#include "core/student/student.h"

namespace tailweir::detect {

namespace {
constexpr double kFloorDensity = 1. / 60;  // the uninformative density of the floor

// The table ends where the density no longer matters beside the floor (a thousandth of it), or 40
// log units from the middle: heavy tails of nu < 1 decay too slowly to be followed further.
double end_of_table(double channels, double nu, double floor, double direction, double span) {
  const double middle = std::log(channels);
  double distance = 0;
  while (distance < span &&
         student::log_density_of_log_distance(middle + direction * distance, channels, nu) >
             std::log(1e-3 * floor)) {
    distance += .5;
  }
  return middle + direction * distance;
}
}  // namespace

EmissionTable::EmissionTable(double channels, double nu, double floor_share) {
  build(channels, nu, floor_share);
}

void EmissionTable::build(double channels, double nu, double floor_share) {
  assert(channels > 0 && nu > 0 && floor_share > 0);
  nu_ = nu;
  const double floor = floor_share * kFloorDensity;
  const int first =
      static_cast<int>(std::floor(end_of_table(channels, nu, floor, -1, kHalfSpan) / kStep));
  const int end =
      static_cast<int>(std::ceil(end_of_table(channels, nu, floor, 1, kHalfSpan) / kStep));
  // On either side a whole grid of floor, so that any y lands inside.
  last_ = end + kPadded;
  columns_ = last_ - (first - kPadded - kPadded) + 1;
  low_ = first - 1;
  high_ = last_ - 1;
  assert(columns_ <= kMostColumns);
  values_.assign(static_cast<std::size_t>(columns_ * (kPhases + 3)), floor);
  const double constant = student::log_density_of_log_distance(0, channels, nu) +
                          .5 * (channels + nu) * std::log1p(1 / nu);
  for (int phase = -1; phase <= kPhases + 1; ++phase) {
    for (int number = first; number <= end; ++number) {
      const double z = kStep * (number + static_cast<double>(phase) / kPhases);
      const double t = z - std::log(nu);
      const double log_one_plus = t > 0 ? t + std::log1p(std::exp(-t)) : std::log1p(std::exp(t));
      const double density =
          std::exp(constant + .5 * channels * z - .5 * (channels + nu) * log_one_plus);
      values_[static_cast<std::size_t>((phase + 1) * columns_ + last_ - number)] +=
          (1 - floor_share) * density;
    }
  }
}

double FilterState::mean_log_scale() const {
  double sum = 0;
  for (int i = 0; i < EmissionTable::kGrid; ++i) {
    sum += weight[i] * (-EmissionTable::kReach + EmissionTable::kStep * i);
  }
  return sum / total;
}

FilterStep::FilterStep(const FilterSettings& settings) {
  const double q = std::pow(settings.step_sd / EmissionTable::kStep, 2);
  assert(q > 0 && q < 1 && settings.jump > 0);
  stay_ = (1 - settings.jump) * (1 - q);
  move_ = (1 - settings.jump) * q / 2;
  jump_ = settings.jump / EmissionTable::kGrid;
}

double FilterStep::operator()(const EmissionTable& table, double y, FilterState& state) const {
  constexpr int n = EmissionTable::kGrid;
  constexpr int padded = EmissionTable::kPadded;
  EmissionTable::Points emission;
  table.emissions(y, emission);
  // Neighbours: w shifted either way, edges reflected.
  Eigen::Array<double, padded + 2, 1> w;
  w.segment<padded>(1) = state.weight;
  w[0] = w[1];
  w[n + 1] = w[n];
  w[padded + 1] = 0;  // beyond the padding: multiplied by the last emission, 0, it must be a number
  const double scale = 1 / state.total;
  state.weight = emission * ((stay_ * scale) * w.segment<padded>(1) +
                             (move_ * scale) * (w.head<padded>() + w.tail<padded>()) + jump_);
  state.total = state.weight.sum();
  return std::log(state.total);
}

}  // namespace tailweir::detect

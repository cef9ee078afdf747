#include "core/detect/calibration.h"

#include <algorithm>
#include <cassert>
#include <cmath>

#include "core/detect/random.h"

namespace tailweir::detect {

namespace {
constexpr int kWarm = 300;
}

Threshold threshold_of(std::vector<double> maxima, double mean_samples) {
  assert(maxima.size() >= 20);
  std::sort(maxima.begin(), maxima.end());
  const double count = static_cast<double>(maxima.size());
  const double level = std::exp(-kCalibrationLength / mean_samples);
  const auto value_at = [&](double rank) {
    const double place = std::clamp(rank, 0., count - 1);
    const auto below = static_cast<std::size_t>(place);
    const std::size_t above = std::min(below + 1, maxima.size() - 1);
    const double share = place - static_cast<double>(below);
    return (1 - share) * maxima[below] + share * maxima[above];
  };
  const double rank = level * count - .5;
  const double spread = std::sqrt(count * level * (1 - level));
  return {value_at(rank), .5 * (value_at(rank + spread) - value_at(rank - spread))};
}

TailCalibration::TailCalibration(double channels, double nu, TailDirection direction,
                                 std::uint64_t seed)
    : channels_(channels), nu_(nu), bank_(channels, bank_of(direction)), seed_(seed) {
  bank_.set_base(nu);
}

void TailCalibration::run(int chains) {
  for (; chains > 0; --chains) {
    CounterRandom random(seed_, maxima_.size());
    bank_.restart();
    double largest = 0;
    for (int t = 0; t < kWarm + kCalibrationLength; ++t) {
      bank_.update(random.log_distance(channels_, nu_), t, t >= kWarm);
      largest = std::max(largest, bank_.statistic());
    }
    maxima_.push_back(largest);
  }
}

AchievedRate achieved_tail_rate(double channels, double nu, TailDirection direction,
                                double threshold, std::int64_t samples, std::uint64_t seed) {
  TailBank bank(channels, bank_of(direction));
  bank.set_base(nu);
  CounterRandom random(seed, 0);
  AchievedRate rate;
  for (std::int64_t t = -kWarm; t < samples; ++t) {
    bank.update(random.log_distance(channels, nu), t, t >= 0);
    if (bank.statistic() > threshold) {
      ++rate.raises;
      bank.reset_sums();
    }
  }
  rate.samples = samples;
  return rate;
}

}  // namespace tailweir::detect

#include "service/scenario/saltmarch.h"

#include <cmath>
#include <numbers>

namespace tailweir {
namespace {

// 2026-03-02T08:00:00Z, a Monday: where the invented clock starts.
constexpr std::int64_t kStart = 1772438400LL * 1000000000;
constexpr std::int64_t kMinute = 60LL * 1000000000;
constexpr double kBasisPoint = 1e-4;

}  // namespace

SaltmarchScenario::SaltmarchScenario(std::uint64_t seed, bool events)
    : bits_(seed * 0x9E3779B97F4A7C15ULL + 0x5A17),
      events_(events),
      channels_({"salt", "eel", "reed", "samphire", "oyster", "peat", "wool", "barley", "tallow",
                 "osier", "flint", "cockle"}),
      price_({41.2, 118.5, 23.9, 87.3, 152.6, 64.8, 99.1, 203.4, 35.7, 71.9, 142.2, 58.4}),
      market_({5, 7, 4, 8, 9, 5, 6, 7, 4, 5, 6, 8}),
      group_({4, 5, 3, 5, 6, 3, -4, -5, -3, -3, -4, 5}) {}

// In (0, 1): 53 bits, never 0.
double SaltmarchScenario::uniform() {
  return (static_cast<double>(bits_() >> 11) + .5) / 9007199254740992.;
}

// Box and Muller, "A note on the generation of random normal deviates", Ann. Math. Stat. 29, 1958.
double SaltmarchScenario::normal() {
  const double radius = std::sqrt(-2 * std::log(uniform()));
  return radius * std::cos(2 * std::numbers::pi * uniform());
}

// Marsaglia and Tsang, "A simple method for generating gamma variables", ACM TOMS 26, 2000.
double SaltmarchScenario::gamma(double shape) {
  const double d = shape - 1. / 3;
  const double c = 1 / std::sqrt(9 * d);
  for (;;) {
    const double x = normal();
    const double v = std::pow(1 + c * x, 3);
    if (v <= 0) continue;
    if (std::log(uniform()) < .5 * x * x + d - d * v + d * std::log(v)) return d * v;
  }
}

void SaltmarchScenario::next(std::int64_t& time_ns, std::vector<double>& prices) {
  ++made_;
  time_ns = kStart + static_cast<std::int64_t>(made_) * kMinute;
  const double nu = events_ && made_ >= planted_.heavy_from ? planted_.heavy_nu : planted_.calm_nu;
  log_volatility_ += -.01 * log_volatility_ + .01 * normal();
  const double scale =
      kBasisPoint * std::exp(log_volatility_) / std::sqrt(gamma(nu / 2) / (nu / 2));
  const double market = normal();
  const double groups[2] = {normal(), normal()};
  for (std::size_t j = 0; j < price_.size(); ++j) {
    const double own = 6 * normal();
    const double change = scale * (market_[j] * market + group_[j] * groups[j % 2] + own);
    const bool stale = events_ && j == planted_.stale_channel && made_ >= planted_.stale_from &&
                       made_ < planted_.stale_to;
    if (!stale) price_[j] *= std::exp(change);
  }
  prices = price_;
  if (events_ && made_ == planted_.mistyped_at) {
    prices[planted_.mistyped_channel] *= planted_.mistyped_factor;
  }
}

}  // namespace tailweir

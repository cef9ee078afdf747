// Saltmarch: an invented exchange with 12 contracts, prices once a minute, made from a seed.
//
// Log returns are multivariate t with one market factor, two groups and a slowly moving volatility:
//   r_j = 1e-4 s_t (b_j f + c_j g_group + e_j)/sqrt(w),  w ~ Gamma(nu/2, rate nu/2).
// With events: nu is 8, then 3 from heavy_from on; one price is mistyped (two digits swapped places
// with a slip of the decimal, undone a minute later); one contract stands still for an hour.
// planted() tells what was planted, for summaries only: nothing else may look. Same seed, same
// samples. Thread rule: one owner.
#pragma once

#include <cstdint>
#include <random>
#include <string>
#include <vector>

namespace tailweir {

struct SaltmarchEvents {
  std::uint64_t mistyped_at = 1740;  // samples count from 1
  std::size_t mistyped_channel = 4;
  double mistyped_factor = 1.027;  // of the price
  std::uint64_t heavy_from = 1950;
  double calm_nu = 8, heavy_nu = 3;
  std::uint64_t stale_from = 2330, stale_to = 2390;
  std::size_t stale_channel = 9;
};

class SaltmarchScenario {
 public:
  explicit SaltmarchScenario(std::uint64_t seed, bool events = true);

  const std::vector<std::string>& channels() const { return channels_; }
  std::uint64_t length() const { return 2450; }
  const SaltmarchEvents& planted() const { return planted_; }
  bool has_events() const { return events_; }

  // The next minute: its time and the 12 prices. Goes on beyond length().
  void next(std::int64_t& time_ns, std::vector<double>& prices);

 private:
  double uniform();
  double normal();
  double gamma(double shape);  // shape >= 1, scale 1

  std::mt19937_64 bits_;
  bool events_;
  SaltmarchEvents planted_;
  std::vector<std::string> channels_;
  std::vector<double> price_, market_, group_;
  double log_volatility_ = 0;
  std::uint64_t made_ = 0;
};

}  // namespace tailweir

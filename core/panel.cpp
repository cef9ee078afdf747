#include "core/panel.h"

#include <algorithm>
#include <cmath>
#include <limits>
#include <vector>

#include "core/horizon.h"

namespace tailweir {

struct Panel::Body {
  explicit Body(PanelSettings given) : settings(std::move(given)) {
    horizons.reserve(settings.horizons.size());
    for (const HorizonSettings& h : settings.horizons) horizons.emplace_back(settings, h);
    flags.reserve(settings.horizons.size());
  }
  PanelSettings settings;
  std::vector<Horizon> horizons;
  std::vector<Flag> flags;
  std::vector<HorizonAlert> alerts;
};

Panel::Panel(PanelSettings settings) : body_(std::make_unique<Body>(std::move(settings))) {}
Panel::~Panel() = default;
Panel::Panel(Panel&&) noexcept = default;
Panel& Panel::operator=(Panel&&) noexcept = default;

void Panel::push(const Eigen::Ref<const Eigen::VectorXd>& x, std::int64_t time_ns) {
  body_->flags.clear();
  body_->alerts.clear();
  for (std::size_t h = 0; h < body_->horizons.size(); ++h) {
    Flag flag;
    if (body_->horizons[h].push(x, time_ns, flag)) {
      flag.horizon = static_cast<Index>(h);
      body_->flags.push_back(std::move(flag));
    }
    for (HorizonAlert alert : body_->horizons[h].alerts()) {
      alert.horizon = static_cast<Index>(h);
      body_->alerts.push_back(alert);
    }
  }
}

Index Panel::channels() const { return body_->settings.channels; }
Index Panel::horizons() const { return static_cast<Index>(body_->horizons.size()); }
const PanelSettings& Panel::settings() const { return body_->settings; }
const Estimate& Panel::estimate(Index h) const {
  return body_->horizons[static_cast<std::size_t>(h)].estimate();
}
const std::vector<Flag>& Panel::flags() const { return body_->flags; }
const std::vector<HorizonAlert>& Panel::alerts() const { return body_->alerts; }

double Panel::coverage(Index h, Index channel) const {
  return body_->horizons[static_cast<std::size_t>(h)].coverage(channel);
}

bool Panel::scatter(Index h, Eigen::MatrixXd& scatter, Eigen::VectorXd& centre) const {
  return body_->horizons[static_cast<std::size_t>(h)].scatter(scatter, centre);
}

}  // namespace tailweir

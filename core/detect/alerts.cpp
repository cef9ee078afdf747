#include "core/detect/alerts.h"

#include <algorithm>
#include <cmath>

namespace tailweir::detect {

namespace {
constexpr std::int64_t kRetestWithin = 100;  // samples after a confirmed tail change

double per_direction(const AlertSettings& s) {
  const bool shape = s.shape && s.channels > 1;
  const int directions = (s.tail ? 2 : 0) + (s.scale ? 2 : 0) + (shape ? 1 : 0);
  return s.mean_samples_between_false * (directions > 0 ? directions : 1);
}

TailSettings tail_settings(const AlertSettings& s) {
  TailSettings tail = s.tail_details;
  tail.channels = static_cast<double>(s.channels);
  tail.mean_samples_heavier = tail.mean_samples_lighter = per_direction(s);
  return tail;
}

ScaleSettings scale_settings(const AlertSettings& s) {
  ScaleSettings scale;
  scale.channels = static_cast<double>(s.channels);
  scale.mean_samples_up = scale.mean_samples_down = per_direction(s);
  return scale;
}
}  // namespace

bool RepeatScreen::stale(const Eigen::Ref<const Eigen::VectorXd>& x,
                         const Eigen::VectorXd* previous) {
  Index repeats = (x.array() == 0).count();
  if (previous != nullptr) repeats = (x.array() == previous->array()).count();
  const bool is_stale = repeats >= std::min<Index>(fewest, x.size());
  screened += is_stale;
  return is_stale;
}

Alerts::Alerts(const AlertSettings& settings)
    : settings_(settings),
      per_direction_(per_direction(settings)),
      tail_(tail_settings(settings)),
      scale_(scale_settings(settings)) {
  if (!settings.shape || settings.channels < 2) return;
  ShapeSettings shape = settings.shape_details;
  shape.channels = settings.channels;
  shape.mean_samples = per_direction_;
  shape_.emplace(shape);
}

const AlertEvents& Alerts::push(const AlertInput& input) {
  events_.count = 0;
  if (!input.fresh) return events_;
  ++t_;
  if (shape_ && input.centred != nullptr) push_shape(input);
  const double y = std::log(input.distance);
  if (!std::isfinite(y)) return events_;
  if (settings_.tail) push_tail(y);
  if (settings_.scale && input.fitted) push_scale(y, input);
  return events_;
}

void Alerts::push_shape(const AlertInput& input) {
  if (!shape_->push(*input.centred)) return;
  events_.add(shape_->alert());
  if (shape_->alert().stage != AlertStage::raised) return;
  const double memory = settings_.shape_details.memory * static_cast<double>(settings_.channels);
  // Monitors count their own samples: compare ages.
  const std::int64_t shape_age = shape_->state().t - shape_->alert().since;
  const std::int64_t tail_age = tail_.count() - tail_.alert().since;
  if (tail_.alert().open() &&
      static_cast<double>(tail_age) <= static_cast<double>(shape_age) + memory && tail_.explain()) {
    events_.add(tail_.alert());
  }
}

void Alerts::push_tail(double y) {
  const bool hold = shape_ && shape_->active();
  if (!tail_.push(y, hold)) return;
  if (tail_.alert().stage == AlertStage::confirmed) tail_confirmed_at_ = t_;
  events_.add(tail_.alert());
}

void Alerts::push_scale(double y, const AlertInput& input) {
  const bool tail_changed = tail_.stage() == AlertStage::confirmed;
  const double nu = tail_changed ? tail_.alert().to : input.nu;
  if (!scale_.push(y, nu, input.log_scale)) return;
  // The first raise soon after the change was summed up under the old nu: once more under the new.
  if (scale_.alert().stage == AlertStage::raised && tail_changed && tail_confirmed_at_ >= 0 &&
      t_ - tail_confirmed_at_ <= kRetestWithin) {
    scale_.retest();
    tail_confirmed_at_ = -1;
    return;
  }
  events_.add(scale_.alert());
}

AlertsState Alerts::state() const {
  AlertsState state{tail_.state(), scale_.state(), std::nullopt, t_, tail_confirmed_at_};
  if (shape_) state.shape = shape_->state();
  return state;
}

void Alerts::restore(const AlertsState& state) {
  tail_.restore(state.tail);
  scale_.restore(state.scale);
  if (shape_ && state.shape) shape_->restore(*state.shape);
  t_ = state.t;
  tail_confirmed_at_ = state.tail_confirmed_at;
}

}  // namespace tailweir::detect

#include "core/scatter/tracker.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <limits>

#include "core/scatter/tracker_internal.h"
#include "core/scatter/weight.h"
#include "core/spd/blas.h"

namespace tailweir {

using namespace tracker_internal;

namespace {

double kept_half_lives(const TrackerSettings& settings, double nu) {
  if (!is_half_life(settings.memory.kind)) return 0;
  if (!(settings.tolerance > 0)) return kKeptHalfLives;
  const double n = settings.memory.kind == Memory::Kind::half_life_samples
                       ? 2.885 * settings.memory.length
                       : 1000.;
  const double share =
      settings.tolerance / error_for(static_cast<double>(settings.channels), nu, std::max(n, 1.));
  return std::clamp(std::log2(.5 / share), kKeptHalfLives, 45.);
}

// Slots the memory needs, or a first guess where only time bounds it.
Index room_for(const TrackerSettings& settings, double kept) {
  switch (settings.memory.kind) {
    case Memory::Kind::window_samples:
      return static_cast<Index>(settings.memory.length) + 1;
    case Memory::Kind::half_life_samples:
      return static_cast<Index>((kept + 2.9) * settings.memory.length) + 3;
    default:
      return 1024;
  }
}

Index slack_for(Index dimension, Index room) {
  const double work = Polish::cost(dimension, room, true);
  if (work <= kOneGo) return 1;
  return static_cast<Index>(16 + 6 * work / 2e6);
}

}  // namespace

Tracker::Tracker(const TrackerSettings& settings, double nu)
    : settings_(settings),
      p_(settings.channels),
      lift_(settings.centre.kind == CentreKind::estimated ? 1 : 0),
      dimension_(p_ + lift_),
      nu_(nu),
      kept_half_lives_(kept_half_lives(settings, nu)),
      ring_((dimension_ + 3) / 4 * 4, room_for(settings, kept_half_lives_),
            slack_for(dimension_, room_for(settings, kept_half_lives_))),
      precision_(dimension_),
      offset_(Eigen::VectorXd::Zero(p_)),
      unit_(Eigen::VectorXd::Ones(p_)),
      shift_(Eigen::VectorXd::Zero(p_)),
      missing_(dimension_),
      missing_counts_(static_cast<std::size_t>(p_), 0),
      polish_(dimension_, lift_),
      scratch_(dimension_, dimension_),
      block_(p_, p_),
      column_(p_, 1),
      check_(p_, p_) {
  assert(nu > static_cast<double>(lift_));
  const std::size_t padded = static_cast<std::size_t>(precision_.padded());
  x_.assign(padded, 0);
  y_.assign(padded, 0);
  x_old_.assign(padded, 0);
  y_old_.assign(padded, 0);
  const Index room = room_for(settings, kept_half_lives_);
  padded_column_.assign(padded, 0);
  missing_now_.reserve(static_cast<std::size_t>(p_));
  scratch_values_.assign(static_cast<std::size_t>(room), 0);
  columns_.resize(dimension_, 64);
  if (is_half_life(settings.memory.kind)) tail_.setZero(dimension_, dimension_);
  if (settings.centre.kind == CentreKind::given) offset_ = settings.centre.given;
  view_mass_.resize(room);
  view_weight_.resize(room);
  view_distance_.resize(room);
  view_observed_.resize(room);
  good_.resize(dimension_, dimension_);
  good_offset_ = offset_;
  good_unit_ = unit_;
  const double n = steady_samples();
  gauge_ = Gauge(static_cast<double>(p_), n, .12 * error_for(static_cast<double>(p_), nu, n),
                 is_half_life(settings.memory.kind) ? 1.35 : 1.1);
}

double Tracker::steady_samples() const {
  switch (settings_.memory.kind) {
    case Memory::Kind::window_samples:
      return settings_.memory.length;
    case Memory::Kind::half_life_samples: {
      const double lambda = std::exp2(-1 / settings_.memory.length);
      return (1 + lambda) / (1 - lambda);
    }
    default:
      return std::max(health_.samples_effective, 5. * static_cast<double>(dimension_));
  }
}

// n_eff for a half-life, 0 for a window.
double Tracker::unequal_masses() const {
  return is_half_life(settings_.memory.kind) ? mass_ * mass_ / mass_square_ : 0;
}

double Tracker::statistical_error() const {
  return error_for(static_cast<double>(p_), nu_, std::max(health_.samples_effective, 1.));
}

double Tracker::tolerance() const {
  return settings_.tolerance > 0 ? settings_.tolerance : .2 * statistical_error();
}

bool Tracker::exact() const {
  return settings_.tolerance > 0 && settings_.tolerance < kExactShare * statistical_error();
}

double Tracker::dot(const std::vector<double>& a, const double* b) const {
  // Four partial sums in a fixed order: the same on every machine.
  double s[4] = {0, 0, 0, 0};
  for (std::size_t i = 0; i < a.size(); i += 4) {
    for (std::size_t k = 0; k < 4; ++k) s[k] += a[i + k] * b[i + k];
  }
  return (s[0] + s[1]) + (s[2] + s[3]);
}

void Tracker::lift_into(const Eigen::Ref<const Eigen::VectorXd>& x) {
  double largest = 0;
  missing_now_.clear();
  for (Index j = 0; j < p_; ++j) {
    double value = (x(j) - offset_(j)) / unit_(j);
    if (std::isnan(value)) {
      missing_now_.push_back(j);
      value = 0;
    }
    x_[static_cast<std::size_t>(j)] = value;
    largest = std::max(largest, std::abs(value));
  }
  if (lift_ == 1) x_[static_cast<std::size_t>(p_)] = 1;
  shrink_ = 1;
  if (state_ == TrackerState::filling || largest <= kAbsurd) return;
  shrink_ = kAbsurd / largest;
  for (Index j = 0; j < p_; ++j) x_[static_cast<std::size_t>(j)] *= shrink_;
}

double Tracker::omega_of(std::int64_t position, std::int64_t time_ns) const {
  switch (settings_.memory.kind) {
    case Memory::Kind::half_life_samples:
      return std::exp2(static_cast<double>(position - base_position_) / settings_.memory.length);
    case Memory::Kind::half_life_time:
      return std::exp2(static_cast<double>(time_ns - base_time_) * 1e-9 / settings_.memory.length);
    default:
      return 1;
  }
}

// Samples that leave a window when one of time `now` enters.
Index Tracker::leaving(std::int64_t now) const {
  if (settings_.memory.kind == Memory::Kind::window_samples) {
    return static_cast<double>(ring_.size()) >= settings_.memory.length ? 1 : 0;
  }
  if (settings_.memory.kind != Memory::Kind::window_time) return 0;
  Index count = 0;
  while (count < ring_.size() &&
         static_cast<double>(now - ring_.time(ring_.begin() + count)) * 1e-9 >=
             settings_.memory.length) {
    ++count;
  }
  return count;
}

double Tracker::predict(const Eigen::Ref<const Eigen::VectorXd>& x, std::int64_t time_ns) {
  assert(x.size() == p_);
  time_ = time_ns;
  lift_into(x);
  departing_ = leaving(time_ns);
  probe_ = -1;
  if (!tracking()) return kNaN;
  if (!missing_now_.empty()) {
    q_new_ = multiply_new();
  } else if (departing_ > 0) {
    const double* old = ring_.x(ring_.begin());
    std::copy(old, old + x_old_.size(), x_old_.begin());
    precision_.multiply(x_.data(), y_.data(), x_old_.data(), y_old_.data());
    q_old_ = dot(x_old_, y_old_.data());
    q_cross_ = dot(x_, y_old_.data());
  } else {
    probe();
    if (probe_ >= 0) {
      precision_.multiply(x_.data(), y_.data(), ring_.x(probe_), y_old_.data());
    } else {
      precision_.multiply(x_.data(), y_.data());
    }
  }
  if (missing_now_.empty()) q_new_ = dot(x_, y_.data());
  const double d = (q_new_ * total_ - static_cast<double>(lift_)) / (shrink_ * shrink_);
  // A distance below zero is rounding; one that is not a number asks for a rebuild.
  if (!std::isfinite(q_new_)) rebuild_wanted_ = true;
  return std::isnan(d) ? kNaN : std::clamp(d, 0., 1e300);
}

// A half-life loses no sample that could tell how stale the weights are: ask one in the ring now
// and then, spread by the golden ratio over those the last polish has seen.
void Tracker::probe() {
  if (!is_half_life(settings_.memory.kind) || polish_.active()) return;
  const std::int64_t every =
      std::max<std::int64_t>(1, static_cast<std::int64_t>(health_.samples_effective / 64));
  if (exact() || health_.since_polish % every != every - 1) return;
  const std::int64_t known = ring_.end() - health_.since_polish - ring_.begin();
  if (known < 8) return;
  const double turn = .6180339887498949 * static_cast<double>(health_.since_polish / every + 1);
  // Recent samples carry the mass: look in the newest third of what is kept.
  const double back = (turn - std::floor(turn)) * static_cast<double>(known) / 3;
  probe_ = ring_.begin() + known - 1 - static_cast<std::int64_t>(back);
}

void Tracker::absorb() {
  health_.iterations = 0;
  ++taken_;
  if (is_half_life(settings_.memory.kind)) {
    const double exponent = std::log2(omega_of(ring_.end(), time_));
    if (!(exponent < 400) || (exponent > 60 && !polish_.active())) renormalise();
  }
  if (!tracking()) {
    for (Index k = 0; k < departing_; ++k) drop_oldest();
    take_slot();
    recount();
    start_if_ready();
    update_health();
    return;
  }
  if (probe_ >= 0) {
    const double q = dot(y_old_, ring_.x(probe_));
    const double nu = nu_ - static_cast<double>(lift_);
    const double p = static_cast<double>(dimension_);
    const double u = (p + nu) / (nu + std::max(q * total_, 0.));
    gauge_.observe(std::log(u * total_ / (mass_ * ring_.weight(probe_, current_))));
  }
  bool partial = !missing_now_.empty();
  for (Index k = 0; k < departing_; ++k) {
    partial = partial || !ring_.partial(ring_.begin() + k).missing.empty();
  }
  if (partial) {
    polish_.abandon();
    for (Index k = 0; k < departing_; ++k) remove_one();
    enter_slowly();
    refresh_log_det();
  } else {
    if (departing_ > 0) remove_first();
    enter();
    remove_others();
  }
  ++health_.since_polish;
  check_samples_left();
  if (tracking()) {
    if (!std::isfinite(log_det_) || !(total_ > 0) || !std::isfinite(total_)) rebuild_wanted_ = true;
    if (rebuild_wanted_) {
      rebuild();
    } else {
      polish_if_due();
    }
  }
  update_health();
}

void Tracker::take_slot() {
  const std::int64_t position = ring_.append();
  std::copy(x_.begin(), x_.end(), ring_.x(position));
  ring_.time(position) = time_;
  ring_.omega(position) = omega_of(position, time_);
  if (missing_now_.empty()) return;
  PartialSample& partial = ring_.partial(position);
  partial.missing = missing_now_;
  partial.f = 0;
  ++partials_;
  for (const Index j : missing_now_) ++missing_counts_[static_cast<std::size_t>(j)];
}

// The oldest sample leaves with exactly what it brought; y_ and q_new_ become those of the new
// sample without it.
void Tracker::remove_first() {
  const std::int64_t oldest = ring_.begin();
  const double omega = ring_.omega(oldest);
  const double w = ring_.weight(oldest, current_);
  const double nu = nu_ - static_cast<double>(lift_);
  const double p = static_cast<double>(dimension_);
  const double u = (p + nu) / (nu + std::max(q_old_ * total_, 0.));
  gauge_.observe(std::log(u * total_ / (mass_ * w)));
  const double a = omega * w;
  const double h = a * q_old_;
  const double limit = std::min(.9, 3 * (p + nu) * omega / mass_);
  if (!(h < limit)) rebuild_wanted_ = true;
  drop_oldest();
  if (!(h < .999)) return;  // the rebuild starts from the ring
  const double g = a / (1 - h);
  precision_.add(g, y_old_.data());
  q_new_ += g * q_cross_ * q_cross_;
  for (std::size_t i = 0; i < y_.size(); ++i) y_[i] += g * q_cross_ * y_old_[i];
  log_det_ += std::log1p(-h);
  const double scale = total_ / mass_;
  mass_ -= omega;
  mass_square_ -= omega * omega;
  total_ -= a;
  // The mean weight that judges the new sample is the one before this removal.
  if (departing_ == 1) {
    enter_scale_ = scale;
  }
}

void Tracker::enter() {
  const double scale = departing_ > 0 && enter_scale_ > 0 ? enter_scale_ : total_ / mass_;
  enter_scale_ = 0;
  take_slot();
  const std::int64_t position = ring_.end() - 1;
  const double omega = ring_.omega(position);
  const double mass = mass_ + omega;
  const double nu = nu_ - static_cast<double>(lift_);
  const double p = static_cast<double>(dimension_);
  const double d1 = q_new_ * scale * mass;
  const double u = leave_one_out_weight(std::max(d1, 0.), omega * std::max(d1, 0.) / mass, nu, p);
  const double w = u * scale;
  const double a = omega * w;
  const double gain = a * q_new_;
  if (!std::isfinite(gain) || !(gain > -.5) || !(w > 0)) {
    ring_.weight(position, current_) = std::isfinite(w) && w > 0 ? w : 1e-300;
    rebuild_wanted_ = true;
    mass_ = mass;
    return;
  }
  ring_.weight(position, current_) = w;
  ring_.distance(position) = std::max((p + nu) / u - nu - static_cast<double>(lift_), 0.);
  precision_.add(-a / (1 + gain), y_.data());
  log_det_ += std::log1p(gain);
  total_ += a;
  mass_ = mass;
  mass_square_ += omega * omega;
}

// A time window may lose several samples at once: one pass each.
void Tracker::remove_others() {
  for (Index k = 1; k < departing_; ++k) {
    const std::int64_t oldest = ring_.begin();
    const double a = ring_.omega(oldest) * ring_.weight(oldest, current_);
    std::copy(ring_.x(oldest), ring_.x(oldest) + x_old_.size(), x_old_.begin());
    precision_.multiply(x_old_.data(), y_old_.data());
    const double h = a * dot(x_old_, y_old_.data());
    mass_ -= ring_.omega(oldest);
    mass_square_ -= ring_.omega(oldest) * ring_.omega(oldest);
    drop_oldest();
    if (!(h < .9)) {
      rebuild_wanted_ = true;
      continue;
    }
    precision_.add(a / (1 - h), y_old_.data());
    log_det_ += std::log1p(-h);
    total_ -= a;
  }
}

// A window that time has emptied, or a half-life after a long gap, cannot hold a scatter any more.
void Tracker::check_samples_left() {
  const double n = mass_ * mass_ / mass_square_;
  if (n >= static_cast<double>(dimension_) + .5) return;
  polish_.abandon();
  state_ = TrackerState::filling;
  retry_in_ = 0;
}

// Exact sums of omega over the ring and the tail.
void Tracker::recount() {
  mass_ = tail_mass_;
  mass_square_ = tail_square_;
  for (std::int64_t k = ring_.begin(); k < ring_.end(); ++k) {
    const double omega = ring_.omega(k);
    mass_ += omega;
    mass_square_ += omega * omega;
  }
}

// Moves the sample whose omega is 1 to the newest, so that omega neither overflows nor wears out.
void Tracker::renormalise() {
  polish_.abandon();
  const std::int64_t old_position = base_position_;
  const std::int64_t old_time = base_time_;
  base_position_ = ring_.end();
  base_time_ = time_;
  const double shift = settings_.memory.kind == Memory::Kind::half_life_samples
                           ? static_cast<double>(old_position - base_position_)
                           : static_cast<double>(old_time - base_time_) * 1e-9;
  const double f = std::exp2(shift / settings_.memory.length);
  for (std::int64_t k = ring_.begin(); k < ring_.end(); ++k) {
    ring_.omega(k) = omega_of(k, ring_.time(k));
    ring_.partial(k).f *= f;
  }
  tail_ *= f;
  tail_total_ *= f;
  tail_mass_ *= f;
  tail_square_ *= f * f;
  total_ *= f;
  recount();
  if (!tracking()) return;
  if (!(f > 1e-250) || !(mass_ > 1e-200)) {  // everything before is forgotten
    state_ = TrackerState::filling;
    retry_in_ = 0;
    departing_ = 0;
    tail_.setZero();
    tail_total_ = tail_mass_ = tail_square_ = 0;
    while (ring_.size() > 0) drop_oldest();
    return;
  }
  precision_.scale(1 / f);
  for (double& value : y_) value /= f;
  q_new_ /= f;
  probe_ = -1;
  log_det_ += static_cast<double>(dimension_) * std::log(f);
}

// Puts samples beyond what a half-life keeps into E, with the weights they have.
void Tracker::retire_tail() {
  if (!is_half_life(settings_.memory.kind)) return;
  const double newest = ring_.omega(ring_.end() - 1);
  const double least = newest * std::exp2(-kept_half_lives_);
  const double normal = mass_ / total_;  // to the scale of weights with mean 1
  Index count = 0;
  while (ring_.size() > 1 && ring_.omega(ring_.begin()) < least) {
    const std::int64_t oldest = ring_.begin();
    const double omega = ring_.omega(oldest);
    const double a = omega * ring_.weight(oldest, current_) * normal;
    const Eigen::Map<const Eigen::VectorXd> x(ring_.x(oldest), dimension_);
    columns_.col(count++) = std::sqrt(a) * x;
    tail_total_ += a;
    tail_mass_ += omega;
    tail_square_ += omega * omega;
    const PartialSample& partial = ring_.partial(oldest);
    if (partial.f > 0) add_conditional(partial, normal, tail_);
    drop_oldest();
    if (count == columns_.cols()) {
      spd::add_gram(1, columns_, 1, tail_);
      count = 0;
    }
  }
  if (count > 0) spd::add_gram(1, columns_.leftCols(count), 1, tail_);
}

void Tracker::polish_if_due() {
  if (polish_.active()) {
    polish_.step(ring_, tail_);
    if (polish_.stage() == Polish::Stage::failed) return rebuild();
    if (polish_.stage() == Polish::Stage::done) take_polish();
    return;
  }
  health_.samples_effective = mass_ * mass_ / mass_square_;
  const double n = health_.samples_effective;
  // While the memory still fills, five polishes a doubling keep up with it.
  // Imputations go stale faster than weights.
  const bool sparse = 20 * partials_ > ring_.size();
  const bool full = departing_ > 0 || is_half_life(settings_.memory.kind);
  const double interval = !full ? n / 5 : sparse ? n / 4 : n;
  const bool due = exact() || static_cast<double>(health_.since_polish) >= interval ||
                   gauge_.estimate(n, health_.since_polish) > tolerance();
  if (!due) return;
  retire_tail();
  recount();
  const bool at_once =
      exact() || partials_ > 0 || Polish::cost(dimension_, ring_.size(), tail_mass_ > 0) <= kOneGo;
  if (!at_once) {
    polish_.start(precision_, ring_,
                  {total_, mass_, nu_ - static_cast<double>(lift_), static_cast<double>(dimension_),
                   current_, tail_total_, unequal_masses()});
    polish_.step(ring_, tail_);
    return;
  }
  const int most = exact() ? kExactIterations : kIterations;
  for (int k = 0; k < most; ++k) {
    if (!iterate()) return;
    if (after_ <= tolerance()) return;
  }
}

// One whole iteration at once. False when it failed; the tracker has then been rebuilt or stopped.
bool Tracker::iterate() {
  if (partials_ > 0) return iterate_whole();
  const double before = health_.iterations > 0 ? health_.residual_at_polish : 0;
  polish_.start(precision_, ring_,
                {total_, mass_, nu_ - static_cast<double>(lift_), static_cast<double>(dimension_),
                 current_, tail_total_, unequal_masses()});
  while (polish_.active()) polish_.step(ring_, tail_);
  if (polish_.stage() == Polish::Stage::failed) {
    fail(TrackerState::not_positive_definite);
    return false;
  }
  const double now = std::max(polish_.residual(), polish_.centre_residual());
  if (exact() && before > 1e-11 && now > 0) {  // two in a row show what an iteration leaves
    contraction_ += .2 * (std::clamp(now / before, .02, .6) - contraction_);
  }
  take_polish();
  return tracking();
}

void Tracker::take_polish() {
  swap(precision_, polish_.precision());
  current_ = 1 - current_;
  total_ = polish_.total();
  log_det_ = polish_.log_det();
  adopt({polish_.residual(), polish_.centre_residual(), polish_.condition(), polish_.first(),
         polish_.last(), polish_.from().nu + static_cast<double>(lift_)});
}

void Tracker::adopt(const Finished& finished) {
  const double found = finished.residual;
  const double left =
      health_.iterations == 0
          ? first_contraction(static_cast<double>(p_), is_half_life(settings_.memory.kind))
          : contraction_;
  after_ = left * std::max(found, finished.centre_residual);
  gauge_.polished(found, left * found, health_.since_polish - (ring_.end() - finished.last));
  health_.residual_at_polish = std::max(found, finished.centre_residual);
  health_.since_polish = ring_.end() - finished.last;
  health_.condition = finished.condition;
  ++health_.polishes;
  ++health_.iterations;
  if (health_.condition > kWorstCondition) return fail(TrackerState::ill_conditioned);
  unsettled_ = found > 2 * statistical_error() ? unsettled_ + 1 : 0;
  if (unsettled_ > 25) {
    unsettled_ = 0;
    return fail(TrackerState::not_converged);
  }
  precision_.settle();
  precision_.copy_to(good_);
  if (lift_ == 1) {
    block_ = good_.topLeftCorner(p_, p_);
    column_ = -good_.row(p_).head(p_).transpose();
    if (spd::cholesky(block_)) {
      spd::solve(block_, column_);
      spd::solve_transposed(block_, column_);
      shift_ = column_.col(0);
    }
  }
  good_total_ = total_;
  good_offset_ = offset_;
  good_unit_ = unit_;
  // What the iteration left per sample; those that left meanwhile are nobody's business any more.
  fit_nu_ = finished.nu;
  for (std::int64_t k = std::max(finished.first, ring_.begin()); k < finished.last; ++k) {
    const double p = static_cast<double>(observed(k));
    ring_.distance(k) = std::max((p + fit_nu_) / ring_.weight(k, current_) - fit_nu_, 0.);
  }
  fill_view(fit_nu_);
}

void Tracker::fill_view(double nu) {
  const Index n = ring_.size();
  if (view_mass_.size() < n) {
    view_mass_.resize(2 * n);
    view_weight_.resize(2 * n);
    view_distance_.resize(2 * n);
    view_observed_.resize(2 * n);
  }
  view_size_ = n;
  view_first_ = ring_.begin();
  view_nu_ = nu;
  double sum = 0;
  for (Index k = 0; k < n; ++k) {
    const std::int64_t position = view_first_ + k;
    const double p = static_cast<double>(observed(position));
    view_observed_(k) = p;
    view_mass_(k) = ring_.omega(position);
    sum += view_mass_(k);
    view_distance_(k) = ring_.distance(position);
    view_weight_(k) = (p + nu) / (nu + view_distance_(k));
  }
  view_mass_.head(n) /= sum;
}

void Tracker::refresh_view() {
  if (tracking()) fill_view(nu_);
}

void Tracker::update_health() {
  health_.samples_effective = mass_square_ > 0 ? mass_ * mass_ / mass_square_ : 0;
  if (!tracking()) {
    health_.residual = kNaN;
    health_.log_det = kNaN;
    return;
  }
  health_.residual = gauge_.estimate(health_.samples_effective, health_.since_polish);
  health_.log_det =
      log_det_ - static_cast<double>(dimension_) * std::log(total_) + 2 * unit_.array().log().sum();
}

void Tracker::set_nu(double nu) {
  assert(nu > static_cast<double>(lift_));
  nu_ = nu;
}

bool Tracker::polish_now() {
  if (!tracking()) return false;
  polish_.abandon();
  const bool ok = iterate();
  update_health();
  return ok;
}

}  // namespace tailweir

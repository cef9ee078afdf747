#include "core/detect/shape_monitor.h"

#include <algorithm>
#include <cassert>
#include <cmath>

#include "core/detect/thresholds.h"
#include "core/spd/blas.h"

namespace tailweir::detect {

namespace {
constexpr double kLearnMemories = 4;  // memories of M before anything is watched
constexpr double kReturn = 8.5;       // ln 5000: reverse test
constexpr double kSmallestDelta = .05;

// sum_k (m_k - r_k)^2 by running both filters on an impulse.
double impulse_power(double rate, double slow_rate, Index batch) {
  double power = 0, fast = 0, slow = 0;
  const double span = 40 / (slow_rate > 0 ? slow_rate / static_cast<double>(batch) : rate);
  for (std::int64_t k = 0; static_cast<double>(k) < span; ++k) {
    fast = k == 0 ? rate : fast * (1 - rate);
    if (slow_rate > 0 && k % batch == batch - 1) slow += slow_rate * (fast - slow);
    power += (fast - slow) * (fast - slow);
  }
  return power;
}
}  // namespace

ShapeMonitor::ShapeMonitor(const ShapeSettings& settings)
    : settings_(settings), p_(static_cast<double>(settings.channels)) {
  assert(settings.channels >= 2 && settings.batch >= 1);
  const Index p = settings.channels;
  const double memory = settings.memory * p_;
  rate_ = 2 / (memory + 1);
  const double slow_memory = memory * settings.reference_ratio;
  slow_rate_ = settings.reference_ratio > 0
                   ? 1 - std::pow(1 - 2 / (slow_memory + 1), static_cast<double>(settings.batch))
                   : 0;
  norm_ = p_ * (p_ - 1) * impulse_power(rate_, slow_rate_, settings.batch);
  threshold_ =
      settings.threshold > 0 ? settings.threshold : shape_threshold(p_, settings.mean_samples);
  learn_ = static_cast<std::int64_t>(kLearnMemories * memory);
  settings_.re_reference_after =
      std::max(settings.re_reference_after, static_cast<std::int64_t>(2 * memory));
  state_.fast = state_.slow = state_.whitener = Eigen::MatrixXd::Identity(p, p);
  state_.along = Eigen::MatrixXd::Zero(p, p);
  state_.block = scaled_ = Eigen::MatrixXd::Zero(p, settings.batch);
  scratch_ = Eigen::MatrixXd::Zero(p, p);
  product_ = Eigen::VectorXd::Zero(p);
}

bool ShapeMonitor::set_reference(const Eigen::Ref<const Eigen::MatrixXd>& scatter) {
  scratch_ = scatter;
  if (!spd::cholesky(scratch_)) return false;
  state_.whitener = scratch_;
  state_.whitening = true;
  state_.fast.setIdentity();
  state_.slow.setIdentity();
  state_.absorbed = 0;
  state_.filled = 0;
  state_.q = 1;
  state_.stage = AlertStage::learning;
  return true;
}

bool ShapeMonitor::push(const Eigen::Ref<const Eigen::VectorXd>& x) {
  assert(x.size() == settings_.channels);
  ++state_.t;
  const double largest = x.cwiseAbs().maxCoeff();
  if (!(largest > 0) || !std::isfinite(largest)) return false;
  state_.block.col(state_.filled) = x / largest;
  if (++state_.filled < settings_.batch) return false;
  state_.filled = 0;
  whiten_block();
  const bool open = state_.alert.open();
  bool changed = false;
  if (open) changed = follow();
  update_fast();
  update_slow(state_.alert.open());
  state_.absorbed += settings_.batch;
  return open ? changed : watch();
}

void ShapeMonitor::whiten_block() {
  if (state_.whitening) spd::solve(state_.whitener, state_.block);
  for (Index k = 0; k < settings_.batch; ++k) state_.block.col(k).normalize();
}

void ShapeMonitor::update_fast() {
  double weight = rate_ * p_;
  for (Index k = settings_.batch - 1; k >= 0; --k) {
    scaled_.col(k) = std::sqrt(weight) * state_.block.col(k);
    weight *= 1 - rate_;
  }
  spd::add_gram(1, scaled_, weight / (rate_ * p_), state_.fast);
}

// R follows M; in its first memories as the plain mean of what has come. The squared distance is
// taken before R moves.
void ShapeMonitor::update_slow(bool frozen) {
  const double batches = static_cast<double>(state_.absorbed / settings_.batch + 1);
  const double rate = slow_rate_ > 0 && !frozen ? std::max(slow_rate_, 1 / batches) : 0;
  square_ = 0;
  const Index p = settings_.channels;
  for (Index j = 0; j < p; ++j) {
    const Index below = p - j - 1;
    const double diagonal = state_.fast(j, j) - state_.slow(j, j);
    square_ += diagonal * diagonal;
    state_.slow(j, j) += rate * diagonal;
    if (below == 0) continue;
    // Both sides in one expression: the difference is used before R is overwritten.
    product_.head(below) = state_.fast.col(j).tail(below) - state_.slow.col(j).tail(below);
    square_ += 2 * product_.head(below).squaredNorm();
    if (rate > 0) state_.slow.col(j).tail(below) += rate * product_.head(below);
  }
}

bool ShapeMonitor::watch() {
  state_.q = square_ / norm_;
  if (state_.absorbed < learn_) return false;
  if (state_.stage == AlertStage::learning) {
    state_.stage = AlertStage::armed;
    state_.ready = false;
    state_.wait = static_cast<std::int64_t>(settings_.memory * p_);
    return false;
  }
  if (!state_.ready) {
    state_.wait -= settings_.batch;
    state_.ready = state_.q < threshold_ || state_.wait <= 0;
  }
  if (state_.q < 1) state_.above_since = state_.t;
  if (!state_.ready || !(state_.q > threshold_)) return false;
  raise();
  return true;
}

void ShapeMonitor::raise() {
  Alert& alert = state_.alert;
  const std::int64_t id = alert.id + 1;
  alert = Alert();
  alert.id = id;
  alert.kind = AlertKind::shape;
  alert.direction = AlertDirection::any;
  alert.stage = state_.stage = AlertStage::raised;
  alert.since = state_.above_since + 1;
  alert.raised_at = alert.changed_at = state_.t;
  alert.statistic = alert.to = state_.q;
  alert.threshold = threshold_;
  alert.from = 1;
  const double length = std::sqrt(square_);
  state_.along = (state_.fast - state_.slow) / length;
  spd::mirror_lower(state_.along);
  scratch_ = state_.slow;
  spd::mirror_lower(scratch_);
  state_.along_reference = state_.along.cwiseProduct(scratch_).sum();
  state_.delta = std::max(kSmallestDelta, length * (state_.q - 1) / state_.q);
  state_.reverse = 0;
  name_pair(alert);
}

// The change back in channels' units, L (M - R) L', as a change of correlation. p^3 multiply-adds.
void ShapeMonitor::name_pair(Alert& alert) {
  const Index p = settings_.channels;
  const Eigen::MatrixXd& l = state_.whitener;
  Eigen::Ref<Eigen::VectorXd> row = scratch_.col(0);
  double largest = -1;
  for (Index k = 1; k < p; ++k) {
    row.setZero();
    row.head(k + 1) = l.row(k).head(k + 1).transpose();
    const double size_k = row.norm();
    spd::symmetric_multiply(state_.along, row.data(), product_.data());
    for (Index j = 0; j < k; ++j) {
      const double change = l.row(j).head(j + 1).dot(product_.head(j + 1));
      const double size = std::abs(change) / (size_k * l.row(j).head(j + 1).norm());
      if (!(size > largest)) continue;
      largest = size;
      alert.first = j;
      alert.second = k;
    }
  }
}

bool ShapeMonitor::follow() {
  Alert& alert = state_.alert;
  const double variance = 2 * p_ / (p_ + 2);
  double gain = 0;
  for (Index k = 0; k < settings_.batch; ++k) {
    spd::symmetric_multiply(state_.along, state_.block.col(k).data(), product_.data());
    const double z = p_ * state_.block.col(k).dot(product_) - state_.along_reference;
    const double ratio = (state_.delta * z - .5 * state_.delta * state_.delta) / variance;
    gain += std::min(kWaldCap, ratio);
    state_.reverse = std::max(0., state_.reverse) - ratio;
  }
  if (alert.stage == AlertStage::raised) {
    state_.reverse = 0;
    alert.wald += gain;
    if (alert.wald >= kWaldBound) {
      alert.stage = state_.stage = AlertStage::confirmed;
      alert.changed_at = state_.t;
      return true;
    }
    if (alert.wald > -kWaldBound && state_.t - alert.raised_at < settings_.longest_raise) {
      return false;
    }
    close(AlertStage::dismissed);
    return true;
  }
  if (state_.reverse > kReturn) {
    close(AlertStage::recovered);
    return true;
  }
  if (state_.t - alert.since < settings_.re_reference_after) return false;
  state_.slow = state_.fast;
  close(AlertStage::re_referenced);
  return true;
}

void ShapeMonitor::close(AlertStage stage) {
  state_.alert.stage = stage;
  state_.alert.changed_at = state_.t;
  state_.stage = AlertStage::armed;
  state_.ready = false;
  state_.wait = static_cast<std::int64_t>(settings_.memory * p_);
}

}  // namespace tailweir::detect

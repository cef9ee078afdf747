#include "core/horizon.h"

#include <algorithm>
#include <cmath>
#include <limits>

#include "core/student/student.h"

namespace tailweir {
namespace {

constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();
// Range in which the scatter follows an estimated nu.
constexpr double kLeastFit = 2, kMostFit = 50;
// nu of the first fit, before there is an estimate.
constexpr double kFirstNu = 5;
// A joint maximum is reached when ln nu moves less than this.
constexpr double kJointTolerance = 1e-9;
// Channels named in a flag.
constexpr Index kNamed = 5;

TrackerSettings tracker_settings(const PanelSettings& panel, const HorizonSettings& settings) {
  TrackerSettings t;
  t.channels = panel.channels;
  t.centre = panel.centre;
  t.memory = settings.memory;
  t.tolerance = settings.tolerance.value_or(0);
  return t;
}

double first_nu(const PanelSettings& panel) {
  return panel.nu.method == NuMethod::fixed ? panel.nu.fixed : kFirstNu;
}

}  // namespace

Horizon::Horizon(const PanelSettings& panel, const HorizonSettings& settings)
    : nu_settings_(panel.nu),
      flags_(panel.channels, {panel.flags.rate, panel.flags.severe_rate, 0}),
      memory_(settings.memory),
      centre_(panel.centre),
      p_(panel.channels),
      exact_(settings.tolerance && *settings.tolerance <= 1e-6),
      tracker_(tracker_settings(panel, settings), first_nu(panel)),
      workspace_(tracker_.view_mass().size()),
      centred_(panel.channels),
      q_(panel.channels),
      diagonal_(panel.channels),
      complete_mass_(tracker_.view_mass().size()) {
  observed_.reserve(static_cast<std::size_t>(panel.channels));
  estimate_.nu = estimate_.nu_low = estimate_.nu_high = kNaN;
  estimate_.nu_fit = estimate_.covariance_factor = estimate_.log_volatility = kNaN;
  estimate_.residual = estimate_.distance = estimate_.p_value = estimate_.condition = kNaN;
  if (panel.alerts.on) {
    detect::AlertSettings alerts;
    alerts.channels = panel.channels;
    alerts.mean_samples_between_false = panel.alerts.mean_samples_between_false;
    alerts_.emplace(alerts);
  }
  changed_.reserve(4);
  if (nu_settings_.method == NuMethod::fixed) {
    nu_.nu = nu_.nu_low = nu_.nu_high = nu_.unblended = nu_settings_.fixed;
    nu_.status = tail::NuStatus::fixed;
    has_nu_ = true;
  }
}

bool Horizon::push(const Eigen::Ref<const Eigen::VectorXd>& x, std::int64_t time_ns, Flag& flag) {
  estimate_.distance = tracker_.predict(x, time_ns);
  estimate_.p_value =
      has_nu_
          ? student::tail_probability(
                estimate_.distance,
                static_cast<double>(p_ - static_cast<Index>(tracker_.missing_now().size())), nu_.nu)
          : kNaN;
  changed_.clear();
  const bool flagged = has_nu_ && std::isfinite(estimate_.distance) && score(x, flag);
  tracker_.absorb();
  ++since_nu_;
  if (tracker_.tracking()) {
    if (tracker_.health().iterations > 0) {
      refresh_nu();
    } else if (since_nu_ >= tracker_.health().samples_effective / 2) {
      tracker_.refresh_view();
      refresh_nu();
    }
  }
  publish();
  return flagged;
}

// Scores the sample of the last predict(); fills the flag and returns true when it is rare.
bool Horizon::score(const Eigen::Ref<const Eigen::VectorXd>& x, Flag& flag) {
  tracker_.residuals(q_, diagonal_);
  // What was observed moves to the front.
  const std::vector<Index>& missing = tracker_.missing_now();
  observed_.clear();
  for (Index j = 0; j < p_; ++j) {
    if (!std::binary_search(missing.begin(), missing.end(), j)) observed_.push_back(j);
  }
  const Index n = static_cast<Index>(observed_.size());
  for (Index k = 0; k < n; ++k) {
    q_(k) = q_(observed_[static_cast<std::size_t>(k)]);
    diagonal_(k) = diagonal_(observed_[static_cast<std::size_t>(k)]);
  }
  const detect::ScoredSample sample{estimate_.distance, centred_.head(n), q_.head(n),
                                    diagonal_.head(n), n < p_ ? observed_.data() : nullptr};
  const detect::ScatterKnowledge known{tracker_.health().samples_effective, nu_.nu,
                                       centre_.kind == CentreKind::estimated};
  const bool stale = repeats_.stale(x);
  const detect::FlagScore score = flags_.score(sample, known, !stale);
  watch(stale || n < p_);
  if (score.level == detect::FlagLevel::usual) return false;
  flag.distance = estimate_.distance;
  flag.p_value = score.combined;
  flag.joint_p_value = score.joint;
  flag.rank_p_value = score.rank;
  flag.severity = score.level == detect::FlagLevel::severe ? Severity::severe : Severity::unusual;
  tracker_.centred(centred_);
  for (Index k = 0; k < n; ++k) centred_(k) = centred_(observed_[static_cast<std::size_t>(k)]);
  flags_.attribute(sample, known, kNamed, parts_);
  for (const detect::ChannelPart& part : parts_) {
    flag.channels.push_back(
        {part.channel, x(part.channel), part.residual, part.share, part.p_value});
  }
  return true;
}

// A memory that is still filling inflates distances in a way that is not a shift of anything.
bool Horizon::mature() const {
  const double n = tracker_.health().samples_effective;
  switch (memory_.kind) {
    case Memory::Kind::window_samples:
      return n >= memory_.length - .5;
    case Memory::Kind::half_life_samples:
      return n >= 2.6 * memory_.length;
    default:
      return n >= 5 * static_cast<double>(p_);
  }
}

// Feeds the shift monitors.
void Horizon::watch(bool stale) {
  if (!alerts_ || !mature()) return;
  if (alerts_->has_shape() && !shape_referenced_) {
    Eigen::MatrixXd s;
    Eigen::VectorXd m;
    shape_referenced_ = tracker_.scatter(s, m) && alerts_->shape().set_reference(s);
    if (!shape_referenced_) return;
  }
  tracker_.centred_roughly(centred_);
  detect::AlertInput input;
  input.distance = estimate_.distance;
  input.fresh = !stale;
  input.fitted = flags_.fit().ready();
  input.nu = flags_.fit().nu();
  input.log_scale = flags_.fit().log_scale();
  input.centred = &centred_;
  const detect::AlertEvents& events = alerts_->push(input);
  for (int k = 0; k < events.count; ++k) {
    const detect::Alert& alert = events.event[static_cast<std::size_t>(k)];
    changed_.push_back({0, alert, alert.changed_at - alert.since});
  }
}

void Horizon::refresh_nu() {
  if (nu_settings_.method == NuMethod::fixed) return;
  // Polishes of a half-life come more often than nu can move: every quarter memory is enough.
  if (has_nu_ && !exact_ && since_nu_ < tracker_.health().samples_effective / 4) return;
  since_nu_ = 0;
  if (nu_settings_.method == NuMethod::likelihood && exact_) return converge_jointly();
  const tail::NuEstimate found = nu_from_view();
  if (!std::isfinite(found.nu)) return;  // the last one stays
  nu_ = found;
  has_nu_ = true;
  if (nu_settings_.method == NuMethod::likelihood) {
    tracker_.set_nu(nu_.nu);
  } else {
    tracker_.set_nu(std::clamp(nu_.nu, kLeastFit, kMostFit));
  }
}

tail::NuEstimate Horizon::nu_from_view() {
  const Index n = tracker_.view_size();
  // Estimators that know complete samples only leave the others out while enough remain.
  complete_mass_ = tracker_.view_mass().head(n);
  const double* observed = tracker_.view_observed();
  if (observed != nullptr && nu_settings_.method != NuMethod::likelihood) {
    for (Index k = 0; k < n; ++k) {
      if (observed[k] < static_cast<double>(p_)) complete_mass_(k) = 0;
    }
    const double left = complete_mass_.sum();
    if (left > .3) {
      complete_mass_ /= left;
    } else {
      complete_mass_ = tracker_.view_mass().head(n);
    }
  }
  const tail::FitView fit{complete_mass_,
                          tracker_.view_weight().head(n),
                          tracker_.view_distance().head(n),
                          p_,
                          tracker_.view_nu(),
                          centre_.kind == CentreKind::estimated,
                          observed};
  if (workspace_.delta.size() < n) workspace_ = tail::Workspace(2 * n);
  switch (nu_settings_.method) {
    case NuMethod::likelihood:
      return tail::likelihood_step(fit, nu_settings_);
    case NuMethod::pop:
      return tail::pop_step(fit, nu_settings_);
    case NuMethod::censored:
      return tail::leave_one_out_censored(fit, nu_settings_, workspace_);
    case NuMethod::kurtosis:
    case NuMethod::trace_ratio: {
      Eigen::MatrixXd samples(p_, n);
      for (Index k = 0; k < n; ++k) tracker_.view_sample(k, samples.col(k));
      const Eigen::ArrayXd mass = tracker_.view_mass().head(n);
      if (nu_settings_.method == NuMethod::kurtosis) {
        return tail::kurtosis(samples, mass, centre_, nu_settings_);
      }
      Eigen::MatrixXd s;
      Eigen::VectorXd m;
      if (!tracker_.scatter(s, m)) return nu_;
      if (centre_.kind == CentreKind::estimated) m = samples * mass.matrix();
      const double trace =
          ((samples.colwise() - m).colwise().squaredNorm().transpose().array() * mass).sum();
      return tail::trace_ratio_step(trace, s.trace(), p_, nu_settings_);
    }
    default:
      break;
  }
  return tail::leave_one_out(fit, nu_settings_, workspace_, has_nu_ ? &nu_ : nullptr);
}

// Joint maximum of the likelihood over scatter, centre and nu, from the last one: each trial nu
// gets its fixed point, Aitken's extrapolation in ln nu does the rest.
void Horizon::converge_jointly() {
  double x = std::log(tracker_.nu());
  double before = x, before_image = x;
  for (int round = 0; round < 60; ++round) {
    nu_ = nu_from_view();
    has_nu_ = true;
    const double image = std::log(nu_.nu);
    if (std::abs(image - x) <= kJointTolerance) return;
    double next = image;
    if (round > 0 && x != before) {
      const double rate = (image - before_image) / (x - before);
      if (rate > 0 && rate < .99) next = x + (image - x) / (1 - rate);
    }
    const double low = std::log(std::max(
        nu_settings_.floor, centre_.kind == CentreKind::estimated ? 1.01 : nu_settings_.floor));
    next = std::clamp(next, low, std::log(nu_settings_.ceiling));
    before = x;
    before_image = image;
    x = next;
    tracker_.set_nu(std::exp(x));
    for (int k = 0; k < 80; ++k) {
      if (!tracker_.polish_now()) return;
      if (tracker_.health().residual_at_polish < 1e-10) break;
    }
  }
}

void Horizon::publish() {
  const TrackerHealth& health = tracker_.health();
  estimate_.iterations = health.iterations;
  estimate_.since_polish = health.since_polish;
  estimate_.samples_effective = health.samples_effective;
  estimate_.coverage = tracker_.coverage();
  estimate_.nu_status = nu_.status;
  switch (tracker_.state()) {
    case TrackerState::filling:
      estimate_.state = HorizonState::warming;
      estimate_.reason = StateReason::too_few_samples;
      return;
    case TrackerState::not_positive_definite:
      estimate_.state = HorizonState::impaired;
      estimate_.reason = StateReason::not_positive_definite;
      return;
    case TrackerState::ill_conditioned:
      estimate_.state = HorizonState::impaired;
      estimate_.reason = StateReason::ill_conditioned;
      return;
    case TrackerState::not_converged:
      estimate_.state = HorizonState::impaired;
      estimate_.reason = StateReason::not_converged;
      return;
    case TrackerState::tracking:
      break;
  }
  estimate_.state = HorizonState::live;
  estimate_.reason = StateReason::none;
  estimate_.nu = nu_.nu;
  estimate_.nu_low = nu_.nu_low;
  estimate_.nu_high = nu_.nu_high;
  estimate_.nu_fit = tracker_.fit_nu();
  estimate_.covariance_factor = nu_.nu > 2 ? nu_.nu / (nu_.nu - 2) : kNaN;
  estimate_.log_volatility = health.log_det / (2 * static_cast<double>(p_));
  estimate_.residual = health.residual;
  estimate_.condition = health.condition;
}

}  // namespace tailweir

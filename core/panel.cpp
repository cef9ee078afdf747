#include "core/panel.h"

#include <algorithm>
#include <cmath>
#include <deque>
#include <limits>

#include "core/scatter/fixed_point.h"
#include "core/spd/blas.h"
#include "core/student/student.h"

namespace tailweir {
namespace {

constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();

// One horizon, refitted at every sample from the previous fit.
class Horizon {
 public:
  Horizon(const PanelSettings& panel, const HorizonSettings& settings)
      : panel_(panel), settings_(settings) {}

  void push(const Eigen::Ref<const Eigen::VectorXd>& x, std::int64_t time_ns) {
    score(x);
    samples_.emplace_back(x);
    times_.push_back(time_ns);
    drop_old(time_ns);
    refit(time_ns);
  }

  Estimate estimate;
  FixedPoint fit;
  Eigen::VectorXd q;  // S^-1 (x - m) of the last sample scored

 private:
  bool ready() const { return estimate.state == HorizonState::live; }

  void score(const Eigen::Ref<const Eigen::VectorXd>& x) {
    estimate.distance = estimate.p_value = kNaN;
    if (!ready()) return;
    const Eigen::VectorXd centred = x - fit.centre;
    Eigen::MatrixXd l = fit.scatter;
    if (!spd::cholesky(l)) return;
    Eigen::MatrixXd y = centred;
    spd::solve(l, y);
    estimate.distance = y.squaredNorm();
    spd::solve_transposed(l, y);
    q = y;
    estimate.p_value = student::tail_probability(estimate.distance,
                                                 static_cast<double>(panel_.channels), estimate.nu);
  }

  double age_weight(std::size_t i, std::int64_t now) const {
    const double h = settings_.memory.length;
    if (settings_.memory.kind == Memory::Kind::half_life_samples) {
      return std::exp2(-static_cast<double>(samples_.size() - 1 - i) / h);
    }
    if (settings_.memory.kind == Memory::Kind::half_life_time) {
      return std::exp2(-static_cast<double>(now - times_[i]) * 1e-9 / h);
    }
    return 1;
  }

  void drop_old(std::int64_t now) {
    const double length = settings_.memory.length;
    const auto old = [&] {
      switch (settings_.memory.kind) {
        case Memory::Kind::window_samples:
          return static_cast<double>(samples_.size()) > length;
        case Memory::Kind::window_time:
          return static_cast<double>(now - times_.front()) * 1e-9 >= length;
        default:
          return age_weight(0, now) < 1e-12;
      }
    };
    while (samples_.size() > 1 && old()) {
      samples_.pop_front();
      times_.pop_front();
    }
  }

  void refit(std::int64_t now) {
    const Index n = static_cast<Index>(samples_.size());
    Eigen::MatrixXd x(panel_.channels, n);
    Eigen::ArrayXd v(n);
    for (Index i = 0; i < n; ++i) {
      x.col(i) = samples_[static_cast<std::size_t>(i)];
      v(i) = age_weight(static_cast<std::size_t>(i), now);
    }
    v /= v.sum();
    estimate.samples_effective = 1 / v.square().sum();
    if (estimate.samples_effective < 3 * static_cast<double>(panel_.channels + 1)) return;
    FixedPointSettings how;
    how.centre = panel_.centre.kind;
    how.given_centre = panel_.centre.given;
    how.tolerance = 1e-11;
    how.nu = panel_.nu.method == NuMethod::fixed ? panel_.nu.fixed
                                                 : std::clamp(ready() ? estimate.nu : 5., 2., 50.);
    FixedPoint next = fit_scatter(x, v, how, ready() ? fit.scatter : Eigen::MatrixXd());
    estimate.iterations = next.iterations;
    if (next.reason != StopReason::converged) {
      estimate.state = HorizonState::impaired;
      estimate.reason = StateReason::not_positive_definite;
      return;
    }
    fit = std::move(next);
    estimate_nu(v, how);
    estimate.state = HorizonState::live;
    estimate.reason = StateReason::none;
    estimate.residual = fit.residual;
    estimate.log_volatility = fit.log_det / (2 * static_cast<double>(panel_.channels));
    estimate.covariance_factor = estimate.nu > 2 ? estimate.nu / (estimate.nu - 2) : kNaN;
  }

  void estimate_nu(const Eigen::ArrayXd& v, const FixedPointSettings& how) {
    estimate.nu_fit = how.nu;
    tail::NuEstimate found;
    if (panel_.nu.method == NuMethod::fixed) {
      found.nu = found.nu_low = found.nu_high = panel_.nu.fixed;
      found.status = tail::NuStatus::fixed;
    } else {
      const tail::FitView view{v,
                               fit.weight,
                               fit.distance,
                               panel_.channels,
                               how.nu,
                               how.centre == CentreKind::estimated};
      if (workspace_.delta.size() < v.size()) workspace_ = tail::Workspace(v.size());
      found = tail::leave_one_out(view, panel_.nu, workspace_, ready() ? estimate.nu : 0);
    }
    estimate.nu = found.nu;
    estimate.nu_low = found.nu_low;
    estimate.nu_high = found.nu_high;
    estimate.nu_status = found.status;
  }

  const PanelSettings& panel_;
  HorizonSettings settings_;
  std::deque<Eigen::VectorXd> samples_;
  std::deque<std::int64_t> times_;
  tail::Workspace workspace_;
};

}  // namespace

struct Panel::Body {
  explicit Body(PanelSettings given) : settings(std::move(given)) {
    for (const HorizonSettings& h : settings.horizons) horizons.emplace_back(settings, h);
  }
  PanelSettings settings;
  std::deque<Horizon> horizons;
  std::vector<Flag> flags;
};

Panel::Panel(PanelSettings settings) : body_(std::make_unique<Body>(std::move(settings))) {}
Panel::~Panel() = default;
Panel::Panel(Panel&&) noexcept = default;
Panel& Panel::operator=(Panel&&) noexcept = default;

void Panel::push(const Eigen::Ref<const Eigen::VectorXd>& x, std::int64_t time_ns) {
  body_->flags.clear();
  const Index p = channels();
  for (std::size_t h = 0; h < body_->horizons.size(); ++h) {
    Horizon& horizon = body_->horizons[h];
    const FixedPoint before = horizon.fit;
    horizon.push(x, time_ns);
    const Estimate& e = horizon.estimate;
    if (!(e.p_value < body_->settings.flags.rate)) continue;
    Flag flag;
    flag.horizon = static_cast<Index>(h);
    flag.distance = e.distance;
    flag.p_value = e.p_value;
    flag.severity =
        e.p_value < body_->settings.flags.severe_rate ? Severity::severe : Severity::unusual;
    Eigen::MatrixXd precision = before.scatter;
    if (!spd::cholesky(precision)) continue;
    spd::inverse_from_cholesky(precision);
    for (Index j = 0; j < p; ++j) {
      ChannelBlame blame;
      blame.channel = j;
      blame.value = x(j);
      blame.residual = horizon.q(j) / std::sqrt(precision(j, j));
      blame.share = (x(j) - before.centre(j)) * horizon.q(j);
      const double rest = flag.distance - blame.residual * blame.residual;
      const double dof = e.nu + static_cast<double>(p - 1);
      blame.p_value = student::two_sided_t_probability(
          blame.residual * std::sqrt(dof / (e.nu + std::max(rest, 0.))), dof);
      flag.channels.push_back(blame);
    }
    std::stable_sort(flag.channels.begin(), flag.channels.end(),
                     [](const ChannelBlame& a, const ChannelBlame& b) {
                       return std::abs(a.residual) > std::abs(b.residual);
                     });
    if (flag.channels.size() > 5) flag.channels.resize(5);
    body_->flags.push_back(std::move(flag));
  }
}

Index Panel::channels() const { return body_->settings.channels; }
Index Panel::horizons() const { return static_cast<Index>(body_->horizons.size()); }
const PanelSettings& Panel::settings() const { return body_->settings; }
const Estimate& Panel::estimate(Index h) const {
  return body_->horizons[static_cast<std::size_t>(h)].estimate;
}
const std::vector<Flag>& Panel::flags() const { return body_->flags; }

bool Panel::scatter(Index h, Eigen::MatrixXd& scatter, Eigen::VectorXd& centre) const {
  const Horizon& horizon = body_->horizons[static_cast<std::size_t>(h)];
  if (horizon.fit.scatter.size() == 0) return false;
  scatter = horizon.fit.scatter;
  centre = horizon.fit.centre;
  return true;
}

}  // namespace tailweir

// One memory of a panel: the tracker, the degrees of freedom and the flags of one horizon.
//
// Per sample: score it against the fit before it, absorb it, and when an iteration has finished
// refresh nu from what it left behind. nu_fit, at which the scatter is the fixed point, follows nu
// within [2, 50]; a fixed or a likelihood nu is its own. Thread rule: one owner; deterministic.
#pragma once

#include <Eigen/Core>
#include <cstdint>
#include <optional>
#include <vector>

#include "core/detect/alerts.h"
#include "core/detect/flags.h"
#include "core/estimate.h"
#include "core/scatter/tracker.h"
#include "core/settings.h"
#include "core/tail/tail.h"

namespace tailweir {

class Horizon {
 public:
  // Preconditions: panel came out of validate(); settings is one of its horizons.
  Horizon(const PanelSettings& panel, const HorizonSettings& settings);

  // Scores and absorbs one sample (p finite values). True, and the flag filled but for its horizon
  // index, when the sample is flagged.
  bool push(const Eigen::Ref<const Eigen::VectorXd>& x, std::int64_t time_ns, Flag& flag);

  // Alerts that changed their stage with the last sample, at most one a kind.
  const std::vector<HorizonAlert>& alerts() const { return changed_; }

  const Estimate& estimate() const { return estimate_; }
  bool scatter(Eigen::MatrixXd& s, Eigen::VectorXd& m) const { return tracker_.scatter(s, m); }
  const TrackerHealth& health() const { return tracker_.health(); }
  // Share of a channel's values in the memory that were observed.
  double coverage(Index channel) const { return tracker_.coverage(channel); }

 private:
  bool score(const Eigen::Ref<const Eigen::VectorXd>& x, Flag& flag);
  void refresh_nu();
  tail::NuEstimate nu_from_view();
  void converge_jointly();
  void publish();
  void watch(bool stale);
  bool mature() const;

  NuSettings nu_settings_;
  detect::Flags flags_;
  detect::RepeatScreen repeats_;
  std::optional<detect::Alerts> alerts_;
  bool shape_referenced_ = false;
  std::vector<HorizonAlert> changed_;
  Memory memory_;
  CentreSettings centre_;
  Index p_;
  bool exact_;
  Tracker tracker_;
  tail::NuEstimate nu_;
  bool has_nu_ = false;
  double since_nu_ = 0;  // samples since nu was refreshed
  tail::Workspace workspace_;
  Estimate estimate_;
  Eigen::VectorXd centred_, q_, diagonal_;
  Eigen::ArrayXd complete_mass_;  // of the view, without samples that miss entries
  std::vector<Index> observed_;
  std::vector<detect::ChannelPart> parts_;
};

}  // namespace tailweir

// One panel: for each of its horizons a scatter tracker, the degrees of freedom and the flags; what
// the engine holds and feeds one sample at a time.
//
// A sample is scored before it is absorbed: `distance` and `p_value` are predictive. Thread rule:
// one panel belongs to one thread. Determinism: results depend on the samples and their times only.
#pragma once

#include <Eigen/Core>
#include <cstdint>
#include <memory>
#include <string>
#include <vector>

#include "core/estimate.h"
#include "core/settings.h"

namespace tailweir {

class Panel {
 public:
  // Precondition: settings came out of validate().
  explicit Panel(PanelSettings settings);
  ~Panel();
  Panel(Panel&&) noexcept;
  Panel& operator=(Panel&&) noexcept;

  // Scores and absorbs one sample. x: p finite values in the channels' units; time_ns: not before
  // the last one's. Cost O(horizons p^2) plus the polish that falls due.
  void push(const Eigen::Ref<const Eigen::VectorXd>& x, std::int64_t time_ns);

  Index channels() const;
  Index horizons() const;
  const PanelSettings& settings() const;

  // Results of the last push, for horizon h in [0, horizons()).
  const Estimate& estimate(Index h) const;
  const std::vector<Flag>& flags() const;
  const std::vector<HorizonAlert>& alerts() const;

  // Share of the values of a channel in the memory of horizon h that were observed, in [0, 1].
  double coverage(Index h, Index channel) const;

  // Writes the current scatter (p x p) and centre (p) of horizon h. False, with both untouched,
  // while it has none (warming, or never live). O(p^2) to O(p^3).
  bool scatter(Index h, Eigen::MatrixXd& scatter, Eigen::VectorXd& centre) const;

 private:
  struct Body;
  std::unique_ptr<Body> body_;
};

}  // namespace tailweir

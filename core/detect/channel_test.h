// Tests of single channels and of groups given all the others, and how much of a distance each
// channel carries: the part of a flag that says where to look.
//
// With x the centred sample, q = S^-1 x and P = S^-1: r_j = q_j/sqrt(P_jj) is the residual of
// channel j given the others in conditional scatter units, D = D_(-j) + r_j^2, and the additive
// shares are c_j = x_j q_j (sum D, may be negative). A group G has Q_G = q_G' (P_GG)^-1 q_G.
// Scatter known: (Q_G/g)(nu + p - g)/(nu + D - Q_G) ~ F(g, nu + p - g); for one channel the square
// of a t. Scatter estimated from n samples, with m = n - p + 1 and E = D - Q_G:
//   v1 = (nu + E (1 - (p - g)/n))/(nu + p - g),  v2 = E/n  (error of the conditional mean),
//   ratio = (Q_G/g)(m/n)/(v1 + v2),  k = 4 + (nu + p - g - 4)((v1 + v2)/v1)^2,
//   p-value = E over c ~ chi2_m of SF_F(ratio c/m; g, k)   (mixed_tail.h).
// k matches the variance of the mixture of a heavy-tailed and a normal part. Derivation and
// measured rates: core/detect/README.md. Published source for the known scatter: conditional
// distributions of the t, Ding, The American Statistician 70, 2016. Thread rule: pure functions,
// but ChannelTest has one owner. No allocation after construction.
#pragma once

#include <Eigen/Core>
#include <cstdint>
#include <vector>

#include "core/detect/mixed_tail.h"
#include "core/settings.h"

namespace tailweir::detect {

// One scored sample, or the observed part of one: all three vectors have one entry a channel that
// was observed, and belong to the marginal scatter of those channels.
struct ScoredSample {
  double distance = 0;                                   // D >= 0
  Eigen::Ref<const Eigen::VectorXd> centred;             // x
  Eigen::Ref<const Eigen::VectorXd> q;                   // S^-1 x
  Eigen::Ref<const Eigen::VectorXd> precision_diagonal;  // diag(S^-1), > 0
  const Index* channel = nullptr;  // numbers of the observed channels; nullptr: 0, 1, ...
};

// What was known about the scatter the sample was scored with.
struct ScatterKnowledge {
  double samples = 0;  // n, or n_eff of a half-life; infinity for a known scatter
  double nu = 4;
  bool centre_estimated = false;
};

// A channel's part in a sample.
struct ChannelPart {
  Index channel = 0;
  double centred = 0;   // x_j
  double residual = 0;  // r_j
  double share = 0;     // c_j
  double drop = 0;      // r_j^2: what D loses without the channel
  double t = 0;         // signed root of the ratio above
  double p_value = 1;   // two-sided, given the other channels, not corrected for their number
};

class ChannelTest {
 public:
  // channels p >= 1: the most a sample can have.
  explicit ChannelTest(Index channels);

  // Smallest Bonferroni-corrected p-value over the channels, p_observed * min_j p_j, at most 1.
  // Exact below `rate`; where no channel can reach `rate` it returns 1 instead of computing. O(p).
  double smallest(const ScoredSample& sample, const ScatterKnowledge& known, double rate);

  // The `count` channels with the largest |r_j|, largest first, into parts (resized within its
  // capacity). O(p count).
  void attribute(const ScoredSample& sample, const ScatterKnowledge& known, Index count,
                 std::vector<ChannelPart>& parts);

  // Q_G and its p-value; q_group = q_G (g), precision_group = P_GG (g x g, lower triangle read, is
  // overwritten by its factor), p channels in the sample. False when P_GG is not positive definite.
  struct GroupResult {
    double q = 0, f = 0, p_value = 1;
  };
  bool group(const Eigen::Ref<const Eigen::VectorXd>& q_group,
             Eigen::Ref<Eigen::MatrixXd> precision, double distance, Index channels,
             const ScatterKnowledge& known, GroupResult& result);

 private:
  struct Ratio {
    double f, k;
  };
  Ratio ratio(double q, double g, double distance, double p, const ScatterKnowledge& known) const;
  double tail(double f, double g, double k, double p, const ScatterKnowledge& known);

  MixedTail tail_;
  double rate_ = -1, critical_ = 0;  // normal critical value of r'^2 for rate_
  Eigen::VectorXd scratch_;
};

}  // namespace tailweir::detect

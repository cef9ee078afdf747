#include "core/detect/channel_test.h"

#include <algorithm>
#include <boost/math/distributions/normal.hpp>
#include <cassert>
#include <cmath>

#include "core/student/student.h"

namespace tailweir::detect {

namespace {
double degrees_left(double p, const ScatterKnowledge& known) {
  return known.centre_estimated ? known.samples - p : known.samples - p + 1;
}
Index number(const ScoredSample& sample, Index at) {
  return sample.channel == nullptr ? at : sample.channel[at];
}
}  // namespace

ChannelTest::ChannelTest(Index channels) : scratch_(channels) {}

ChannelTest::Ratio ChannelTest::ratio(double q, double g, double distance, double p,
                                      const ScatterKnowledge& known) const {
  const double rest = std::max(distance - q, 0.);  // E
  const double nu = known.nu;
  if (!std::isfinite(known.samples)) return {q / g * (nu + p - g) / (nu + rest), nu + p - g};
  const double n = known.samples;
  const double v1 = (nu + rest * (1 - (p - g) / n)) / (nu + p - g);
  const double v2 = (rest + (known.centre_estimated ? 1 : 0)) / n;
  const double spread = (v1 + v2) / v1;
  const double base = nu + p - g;
  // Few degrees have no fourth moment to match: leave them as they are.
  const double k = base > 4 ? 4 + (base - 4) * spread * spread : base;
  return {q / g * (degrees_left(p, known) / n) / (v1 + v2), k};
}

double ChannelTest::tail(double f, double g, double k, double p, const ScatterKnowledge& known) {
  if (!std::isfinite(known.samples)) return student::tail_probability(f * g, g, k);
  const double m = degrees_left(p, known);
  if (!(m > 0)) return std::nan("");
  if (tail_.degrees() != m) tail_ = MixedTail(m);
  return tail_.probability(f, g, k);
}

double ChannelTest::smallest(const ScoredSample& sample, const ScatterKnowledge& known,
                             double rate) {
  const Index count = sample.q.size();
  const double p = static_cast<double>(count);
  if (count == 0 || !(degrees_left(p, known) > 0)) return 1;
  const double r2 = (sample.q.array().square() / sample.precision_diagonal.array()).maxCoeff();
  // The tails are heavier than the normal's, so below its critical value nothing can be flagged.
  if (rate_ != rate / p) {
    rate_ = rate / p;
    const boost::math::normal_distribution<double> normal;
    const double z =
        boost::math::quantile(boost::math::complement(normal, std::min(rate_, 1.) / 2));
    critical_ = z * z;
  }
  const Ratio worst = ratio(r2, 1, sample.distance, p, known);
  if (!(worst.f >= critical_)) return 1;
  // The mixture over c is heavier than its middle: most samples that got here end here.
  if (p * student::tail_probability(worst.f, 1, worst.k) > rate) return 1;
  return std::min(1., p * tail(worst.f, 1, worst.k, p, known));
}

void ChannelTest::attribute(const ScoredSample& sample, const ScatterKnowledge& known, Index count,
                            std::vector<ChannelPart>& parts) {
  const Index size = sample.q.size();
  assert(size <= scratch_.size());
  const double p = static_cast<double>(size);
  scratch_.head(size) = sample.q.array().square() / sample.precision_diagonal.array();
  parts.clear();
  for (Index rank = 0; rank < std::min(count, size); ++rank) {
    Index at = 0;
    const double r2 = scratch_.head(size).maxCoeff(&at);
    scratch_[at] = -1;
    const Ratio ratio_at = ratio(r2, 1, sample.distance, p, known);
    const double sign = sample.q[at] < 0 ? -1 : 1;
    ChannelPart part;
    part.channel = number(sample, at);
    part.centred = sample.centred[at];
    part.residual = sign * std::sqrt(r2);
    part.share = sample.centred[at] * sample.q[at];
    part.drop = r2;
    part.t = sign * std::sqrt(ratio_at.f);
    part.p_value = tail(ratio_at.f, 1, ratio_at.k, p, known);
    parts.push_back(part);
  }
}

bool ChannelTest::group(const Eigen::Ref<const Eigen::VectorXd>& q_group,
                        Eigen::Ref<Eigen::MatrixXd> precision, double distance, Index channels,
                        const ScatterKnowledge& known, GroupResult& result) {
  const Index g = q_group.size();
  assert(g >= 1 && g <= channels && precision.rows() == g && precision.cols() == g);
  // Q = |L^-1 q|^2 with P_GG = L L', factorised in place.
  double q = 0;
  for (Index j = 0; j < g; ++j) {
    double pivot = precision(j, j), value = q_group[j];
    for (Index i = 0; i < j; ++i) {
      pivot -= precision(j, i) * precision(j, i);
      value -= precision(j, i) * scratch_[i];
    }
    if (!(pivot > 0)) return false;
    const double root = std::sqrt(pivot);
    scratch_[j] = value / root;
    q += scratch_[j] * scratch_[j];
    precision(j, j) = root;
    for (Index k = j + 1; k < g; ++k) {
      double below = precision(k, j);
      for (Index i = 0; i < j; ++i) below -= precision(k, i) * precision(j, i);
      precision(k, j) = below / root;
    }
  }
  const double p = static_cast<double>(channels), size = static_cast<double>(g);
  result.q = q;
  const Ratio found = ratio(q, size, distance, p, known);
  result.f = found.f;
  result.p_value = tail(found.f, size, found.k, p, known);
  return true;
}

}  // namespace tailweir::detect

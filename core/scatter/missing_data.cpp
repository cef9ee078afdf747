#include "core/scatter/missing_data.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <map>

namespace tailweir {
namespace {

double median_of(std::vector<double>& values) {
  if (values.empty()) return 0;
  const auto middle = values.begin() + static_cast<std::ptrdiff_t>(values.size() / 2);
  std::nth_element(values.begin(), middle, values.end());
  return *middle;
}

void choose_offset_and_unit(const Eigen::Ref<const Eigen::MatrixXd>& samples,
                            const MissingSettings& settings, MissingData& data) {
  const Index p = samples.rows();
  data.offset = settings.centre == CentreKind::given ? settings.given_centre
                                                     : Eigen::VectorXd(Eigen::VectorXd::Zero(p));
  data.unit = Eigen::VectorXd::Ones(p);
  std::vector<double> values;
  for (Index j = 0; j < p; ++j) {
    values.clear();
    for (Index i = 0; i < samples.cols(); ++i) {
      if (!std::isnan(samples(j, i))) values.push_back(samples(j, i));
    }
    if (data.lift == 1) data.offset(j) = median_of(values);
    for (double& value : values) value = std::abs(value - data.offset(j));
    const double size = median_of(values);
    if (size > 0 && std::isfinite(size)) data.unit(j) = std::exp2(std::floor(std::log2(size)));
  }
  data.log_unit = data.unit.array().log().sum();
}

// Whether every channel, and every pair of channels, is observed with positive mass.
bool determined(const Eigen::MatrixXd& seen, const Eigen::ArrayXd& mass, MissingFit& fit) {
  const Index p = seen.rows();
  Eigen::MatrixXd together = Eigen::MatrixXd::Zero(p, p);
  together.selfadjointView<Eigen::Lower>().rankUpdate(
      (seen.array().rowwise() * mass.sqrt().transpose()).matrix());
  fit.coverage = together.diagonal().array();
  for (Index j = 0; j < p; ++j) {
    if (together(j, j) > 0) continue;
    fit.reason = MissingStop::channel_unobserved;
    fit.channel = j;
    return false;
  }
  for (Index j = 0; j < p; ++j) {
    for (Index i = j + 1; i < p; ++i) {
      if (together(i, j) > 0) continue;
      fit.reason = MissingStop::pair_unobserved;
      fit.channel = j;
      fit.partner = i;
      return false;
    }
  }
  return true;
}

// Columns of `data.x` in the order of their patterns; samples without an entry or mass stay out.
void sort_by_pattern(const Eigen::Ref<const Eigen::MatrixXd>& samples, const Eigen::ArrayXd& mass,
                     const Eigen::ArrayXd& observed, MissingData& data) {
  std::map<std::vector<Index>, std::vector<Index>> groups;
  for (Index i = 0; i < samples.cols(); ++i) {
    if (!(observed(i) > 0) || !(mass(i) > 0)) continue;
    std::vector<Index> missing;
    for (Index j = 0; j < data.channels; ++j) {
      if (std::isnan(samples(j, i))) missing.push_back(j + data.lift);
    }
    groups[missing].push_back(i);
  }
  for (const auto& [missing, columns] : groups) {
    MissingPattern pattern;
    pattern.missing = missing;
    pattern.first = static_cast<Index>(data.order.size());
    pattern.count = static_cast<Index>(columns.size());
    data.patterns.push_back(pattern);
    data.order.insert(data.order.end(), columns.begin(), columns.end());
  }
  const Index used = static_cast<Index>(data.order.size());
  data.x.setOnes(data.channels + data.lift, used);
  data.mass.resize(used);
  data.observed.resize(used);
  for (Index k = 0; k < used; ++k) {
    const Index i = data.order[static_cast<std::size_t>(k)];
    data.mass(k) = mass(i);
    data.observed(k) = observed(i);
    for (Index j = 0; j < data.channels; ++j) {
      const double value = samples(j, i);
      data.x(j + data.lift, k) = std::isnan(value) ? 0 : (value - data.offset(j)) / data.unit(j);
    }
  }
  data.mass /= data.mass.sum();
  for (MissingPattern& pattern : data.patterns) {
    pattern.mass = data.mass.segment(pattern.first, pattern.count).sum();
  }
}

}  // namespace

bool prepare_missing(const Eigen::Ref<const Eigen::MatrixXd>& samples,
                     const Eigen::Ref<const Eigen::ArrayXd>& mass, const MissingSettings& settings,
                     MissingData& data, MissingFit& fit) {
  assert(samples.cols() == mass.size());
  data.channels = samples.rows();
  data.lift = settings.centre == CentreKind::estimated ? 1 : 0;
  const double total = mass.sum();
  if (samples.array().isInf().any() || !mass.allFinite() || !std::isfinite(total) ||
      (settings.centre == CentreKind::given && !settings.given_centre.allFinite())) {
    fit.reason = MissingStop::not_finite;
    return false;
  }
  if (!(total > 0)) {
    fit.reason = MissingStop::not_positive_definite;
    return false;
  }
  const Eigen::ArrayXd share = mass / total;
  const Eigen::MatrixXd seen =
      samples.unaryExpr([](double value) { return std::isnan(value) ? 0. : 1.; });
  fit.observed = seen.colwise().sum().transpose().array();
  if (!determined(seen, share, fit)) return false;
  choose_offset_and_unit(samples, settings, data);
  sort_by_pattern(samples, share, fit.observed, data);
  if (!data.x.allFinite()) {
    fit.reason = MissingStop::not_finite;
    return false;
  }
  if (data.x.cols() < data.channels + data.lift) {
    fit.reason = MissingStop::not_positive_definite;
    return false;
  }
  return true;
}

}  // namespace tailweir

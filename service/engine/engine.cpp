#include "service/engine/engine.h"

#include <algorithm>
#include <cmath>
#include <map>

#include "core/detect/alert.h"
#include "service/assemble/changes.h"

namespace tailweir {
namespace {

constexpr double kLargest = 1e150;
constexpr double kSmallest = 1e-150;

std::string number(double value) {
  char text[32];
  std::snprintf(text, sizeof text, "%g", value);
  return text;
}

Refusal refuse(RefusalReason reason, std::string where, std::string what, std::string allowed) {
  return {reason, {std::move(where), std::move(what), std::move(allowed)}};
}

}  // namespace

const char* name_of(RefusalReason reason) {
  switch (reason) {
    case RefusalReason::none:
      return "none";
    case RefusalReason::wrong_count:
      return "wrong_count";
    case RefusalReason::not_finite:
      return "not_finite";
    case RefusalReason::missing:
      return "missing";
    case RefusalReason::time_backwards:
      return "time_backwards";
    case RefusalReason::not_positive:
      return "not_positive";
    case RefusalReason::out_of_range:
      return "out_of_range";
    case RefusalReason::sequence_gap:
      return "sequence_gap";
    case RefusalReason::bad_frame:
      return "bad_frame";
  }
  return "unknown";
}

void Actions::clear() {
  records.clear();
  accepted = false;
  duplicate = false;
  refusal = {};
}

struct Engine::Body {
  explicit Body(Settings given) : settings(std::move(given)), changes(settings.channels) {
    for (const PanelInput& input : settings.panels) {
      panels.emplace_back(input.core);
      PanelDescription description;
      description.name = input.core.name;
      for (const std::size_t k : input.channels) {
        description.channels.push_back(settings.channels[k].name);
      }
      for (const HorizonSettings& horizon : input.core.horizons) {
        description.horizons.push_back(horizon.name);
      }
      descriptions.push_back(std::move(description));
      inputs.emplace_back(static_cast<Index>(input.channels.size()));
      flagged.emplace_back(input.core.horizons.size(), 0);
      scored.emplace_back(input.core.horizons.size(), 0);
    }
    counters.refused_by_reason.assign(static_cast<std::size_t>(RefusalReason::bad_frame) + 1, 0);
  }

  Refusal check(const SampleEvent& event, std::vector<double>& change) const;
  void push(const SampleEvent& event, const std::vector<double>& change, Actions& actions);
  AlertRecord alert_record(std::size_t panel, const HorizonAlert& alert) const;
  void fill_matrices(std::size_t panel, Index horizon, EstimateRecord& record) const;

  Settings settings;
  Changes changes;
  std::vector<Panel> panels;
  std::vector<PanelDescription> descriptions;
  std::vector<Eigen::VectorXd> inputs;
  std::vector<std::vector<std::uint64_t>> flagged, scored;
  std::map<std::string, std::uint64_t> next_sequence;
  EngineCounters counters;
  MatricesPolicy matrices;
  std::uint64_t sequence = 0;
  std::int64_t last_time_ns = 0;
};

Engine::Engine(Settings settings) : body_(std::make_unique<Body>(std::move(settings))) {}
Engine::~Engine() = default;
Engine::Engine(Engine&&) noexcept = default;

Refusal Engine::Body::check(const SampleEvent& event, std::vector<double>& change) const {
  const std::size_t count = settings.channels.size();
  if (event.values.size() != count) {
    return refuse(RefusalReason::wrong_count, "sample",
                  "has " + std::to_string(event.values.size()) + " values",
                  "one for each of the " + std::to_string(count) + " channels");
  }
  std::size_t missing = 0;
  for (std::size_t k = 0; k < count; ++k) {
    const double x = event.values[k];
    const std::string& name = settings.channels[k].name;
    if (std::isnan(x)) {  // missing
      ++missing;
      continue;
    }
    if (std::isinf(x)) {
      return refuse(RefusalReason::not_finite, name, "the value is infinite", "a finite number");
    }
    if (std::abs(x) > kLargest || (x != 0 && std::abs(x) < kSmallest)) {
      return refuse(RefusalReason::out_of_range, name,
                    "the value " + number(x) + " is out of range",
                    "0, or a size from 1e-150 to 1e150");
    }
  }
  if (missing == count) {
    return refuse(RefusalReason::missing, "sample", "every value is missing",
                  "at least one finite number");
  }
  if (sequence > 0 && event.time_ns < last_time_ns) {
    return refuse(RefusalReason::time_backwards, "time",
                  std::to_string(event.time_ns) + " ns is before the last sample's " +
                      std::to_string(last_time_ns) + " ns",
                  "samples in order of time");
  }
  Result<std::vector<double>> looked = changes.look(event.values);
  if (!looked) return {RefusalReason::not_positive, looked.fault()};
  change = std::move(looked.value());
  for (std::size_t k = 0; k < count; ++k) {
    if (std::isnan(change[k])) continue;  // first level of the channel
    if (!(std::abs(change[k]) <= kLargest)) {
      return refuse(RefusalReason::out_of_range, settings.channels[k].name,
                    "the change " + number(change[k]) + " is out of range", "a size up to 1e150");
    }
  }
  return {};
}

void Engine::step(const SampleEvent& event, Actions& actions) {
  actions.clear();
  Body& b = *body_;
  if (event.sender_sequence > 0) {
    const std::uint64_t next = next_of(event.sender);
    if (event.sender_sequence < next) {
      actions.accepted = actions.duplicate = true;
      ++b.counters.duplicates;
      return;
    }
    if (event.sender_sequence > next) {
      actions.refusal = refuse(RefusalReason::sequence_gap, "sender " + event.sender,
                               "sample " + std::to_string(event.sender_sequence) + " came before " +
                                   std::to_string(next),
                               "samples from " + std::to_string(next) + " on");
      ++b.counters.refused;
      ++b.counters.refused_by_reason[static_cast<std::size_t>(RefusalReason::sequence_gap)];
      return;
    }
    b.next_sequence[event.sender] = next + 1;
  }
  std::vector<double> change;
  actions.refusal = b.check(event, change);
  if (actions.refusal.reason != RefusalReason::none) {
    ++b.counters.refused;
    ++b.counters.refused_by_reason[static_cast<std::size_t>(actions.refusal.reason)];
    return;
  }
  b.push(event, change, actions);
}

void Engine::Body::push(const SampleEvent& event, const std::vector<double>& change,
                        Actions& actions) {
  const bool base_only = changes.lacks_base(event.values);
  changes.take(event.values);
  ++sequence;
  ++counters.accepted;
  last_time_ns = event.time_ns;
  actions.accepted = true;
  if (base_only) return;  // the first levels: there is no change yet
  for (std::size_t k = 0; k < panels.size(); ++k) {
    const std::vector<std::size_t>& which = settings.panels[k].channels;
    for (std::size_t j = 0; j < which.size(); ++j) {
      inputs[k](static_cast<Index>(j)) = change[which[j]];
    }
    // A panel of which nothing was observed has nothing to say about this sample.
    if (inputs[k].array().isNaN().all()) continue;
    panels[k].push(inputs[k], event.time_ns);
    for (Index h = 0; h < panels[k].horizons(); ++h) {
      EstimateRecord record;
      record.sequence = sequence;
      record.time_ns = event.time_ns;
      record.panel = static_cast<std::uint32_t>(k);
      record.horizon = static_cast<std::uint32_t>(h);
      record.channels_version = descriptions[k].channels_version;
      record.estimate = panels[k].estimate(h);
      for (const Flag& flag : panels[k].flags()) record.flagged |= flag.horizon == h;
      if (!std::isnan(record.estimate.p_value)) ++scored[k][static_cast<std::size_t>(h)];
      if (record.estimate.coverage < 1) {
        for (Index j = 0; j < panels[k].channels(); ++j) {
          record.channel_coverage.push_back(panels[k].coverage(h, j));
        }
      }
      if (matrices.wants(sequence, record.flagged)) fill_matrices(k, h, record);
      actions.records.emplace_back(std::move(record));
    }
    for (const Flag& flag : panels[k].flags()) {
      const std::size_t h = static_cast<std::size_t>(flag.horizon);
      FlagRecord record;
      record.sequence = sequence;
      record.time_ns = event.time_ns;
      record.panel = static_cast<std::uint32_t>(k);
      record.horizon = static_cast<std::uint32_t>(h);
      record.flag = flag;
      record.flagged = ++flagged[k][h];
      record.flagged_expected =
          settings.panels[k].core.flags.rate * static_cast<double>(scored[k][h]);
      actions.records.emplace_back(std::move(record));
    }
    for (const HorizonAlert& alert : panels[k].alerts()) {
      actions.records.emplace_back(alert_record(k, alert));
    }
  }
}

AlertRecord Engine::Body::alert_record(std::size_t panel, const HorizonAlert& alert) const {
  const auto name = [&](Eigen::Index channel) {
    return channel < 0 ? std::string()
                       : descriptions[panel].channels[static_cast<std::size_t>(channel)];
  };
  AlertRecord record;
  record.sequence = sequence;
  record.time_ns = last_time_ns;
  record.panel = static_cast<std::uint32_t>(panel);
  record.horizon = static_cast<std::uint32_t>(alert.horizon);
  const auto ago = static_cast<std::uint64_t>(std::max<std::int64_t>(alert.samples_ago, 0));
  record.since = ago < sequence ? sequence - ago : 1;
  record.alert = alert.alert;
  record.text = detect::describe(alert.alert, alert.alert.changed_at, name(alert.alert.first),
                                 name(alert.alert.second));
  return record;
}

void Engine::Body::fill_matrices(std::size_t panel, Index horizon, EstimateRecord& record) const {
  Eigen::MatrixXd s;
  Eigen::VectorXd m;
  if (!panels[panel].scatter(horizon, s, m)) return;
  record.centre.assign(m.data(), m.data() + m.size());
  record.scatter.reserve(static_cast<std::size_t>(s.rows() * (s.rows() + 1) / 2));
  for (Index i = 0; i < s.rows(); ++i) {
    for (Index j = 0; j <= i; ++j) record.scatter.push_back(s(i, j));
  }
}

void Engine::set_matrices(const MatricesPolicy& policy) { body_->matrices = policy; }
const Settings& Engine::settings() const { return body_->settings; }
const std::vector<PanelDescription>& Engine::descriptions() const { return body_->descriptions; }
const EngineCounters& Engine::counters() const { return body_->counters; }
std::uint64_t Engine::sequence() const { return body_->sequence; }
std::int64_t Engine::last_time_ns() const { return body_->last_time_ns; }

std::uint64_t Engine::next_of(const std::string& sender) const {
  const auto found = body_->next_sequence.find(sender);
  return found == body_->next_sequence.end() ? 1 : found->second;
}

EstimateRecord Engine::latest(std::uint32_t panel, std::uint32_t horizon) const {
  EstimateRecord record;
  record.sequence = body_->sequence;
  record.time_ns = body_->last_time_ns;
  record.panel = panel;
  record.horizon = horizon;
  record.channels_version = body_->descriptions[panel].channels_version;
  record.estimate = body_->panels[panel].estimate(static_cast<Index>(horizon));
  body_->fill_matrices(panel, static_cast<Index>(horizon), record);
  return record;
}

}  // namespace tailweir

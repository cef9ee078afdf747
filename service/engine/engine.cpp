#include "service/engine/engine.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <limits>
#include <map>
#include <utility>

#include "service/assemble/changes.h"
#include "service/assemble/time_text.h"

namespace tailweir {
namespace {

constexpr std::size_t kReasons = static_cast<std::size_t>(RefusalReason::bad_frame) + 1;

std::string number_text(double value) {
  char text[32];
  const int length = std::snprintf(text, sizeof text, "%.6g", value);
  return std::string(text, static_cast<std::size_t>(length));
}

// One panel with what the records of its horizons count.
struct Lane {
  explicit Lane(const PanelInput& input)
      : panel(input.core),
        inputs(input.channels),
        x(static_cast<Index>(input.channels.size())),
        flagged(input.core.horizons.size()),
        scored(input.core.horizons.size()) {}

  // Fills x with the panel's changes; false while one of them has no base yet.
  bool gather(const std::vector<double>& changes) {
    for (std::size_t i = 0; i < inputs.size(); ++i) {
      x(static_cast<Index>(i)) = changes[inputs[i]];
    }
    return x.allFinite();
  }

  Panel panel;
  std::vector<std::size_t> inputs;
  Eigen::VectorXd x;
  std::vector<std::uint64_t> flagged;  // flags raised, by horizon
  std::vector<std::uint64_t> scored;   // samples that had a p-value, by horizon
  std::uint64_t sequence = 0;          // of the last sample pushed
  std::int64_t time_ns = 0;
};

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
  accepted = duplicate = false;
  refusal = {};
}

struct Engine::Body {
  explicit Body(Settings given) : settings(std::move(given)), assembler(settings.channels) {
    for (const PanelInput& input : settings.panels) {
      lanes.emplace_back(input);
      PanelDescription description;
      description.name = input.core.name;
      for (const std::size_t channel : input.channels) {
        description.channels.push_back(settings.channels[channel].name);
      }
      for (const HorizonSettings& horizon : input.core.horizons) {
        description.horizons.push_back(horizon.name);
      }
      descriptions.push_back(std::move(description));
    }
    counters.refused_by_reason.resize(kReasons);
  }

  Refusal refuse(RefusalReason reason, std::string what, std::string allowed) const {
    return {reason, Fault{"", std::move(what), std::move(allowed)}};
  }
  Refusal refuse_value(RefusalReason reason, std::size_t channel, const std::string& what,
                       std::string allowed) const {
    return refuse(reason, "channel " + settings.channels[channel].name + ": " + what,
                  std::move(allowed));
  }

  Refusal check_values(const std::vector<double>& values) const;
  Refusal check(const SampleEvent& event);
  void publish(std::uint32_t index, std::vector<Record>& records);
  EstimateRecord estimate_record(std::uint32_t panel, std::uint32_t horizon,
                                 bool with_matrices) const;

  Settings settings;
  ChangeAssembler assembler;
  std::vector<Lane> lanes;
  std::vector<PanelDescription> descriptions;
  EngineCounters counters;
  std::map<std::string, std::uint64_t> expected;  // next sequence, by sender
  std::uint64_t sequence = 0;
  std::int64_t last_time_ns = std::numeric_limits<std::int64_t>::min();
  std::vector<double> changes;
  bool matrices = true;
  mutable Eigen::MatrixXd scatter;
  mutable Eigen::VectorXd centre;
};

Refusal Engine::Body::check_values(const std::vector<double>& values) const {
  if (values.size() != settings.channels.size()) {
    return refuse(RefusalReason::wrong_count,
                  "a sample has " + std::to_string(values.size()) + " values",
                  "one per channel: " + std::to_string(settings.channels.size()));
  }
  for (std::size_t i = 0; i < values.size(); ++i) {
    if (std::isinf(values[i])) {
      return refuse_value(RefusalReason::not_finite, i, "the value is infinite",
                          "send finite numbers");
    }
    if (std::isnan(values[i])) {
      return refuse_value(RefusalReason::missing, i, "the value is missing",
                          "this version needs every channel in every sample");
    }
  }
  return {};
}

// Fills changes. Alters nothing else.
Refusal Engine::Body::check(const SampleEvent& event) {
  Refusal refusal = check_values(event.values);
  if (refusal.reason != RefusalReason::none) return refusal;
  if (event.time_ns < last_time_ns) {
    return refuse(RefusalReason::time_backwards,
                  "time " + time_text(event.time_ns) + " goes back, the last sample has " +
                      time_text(last_time_ns),
                  "send samples in the order of their times");
  }
  std::size_t channel = 0;
  switch (assembler.preview(event.values, changes, channel)) {
    case ChangeAssembler::Trouble::none:
      return {};
    case ChangeAssembler::Trouble::not_positive:
      return refuse_value(
          RefusalReason::not_positive, channel,
          "the level " + number_text(event.values[channel]) + " has no logarithm or ratio",
          "send levels above 0, or set step: difference");
    case ChangeAssembler::Trouble::out_of_range:
      break;
  }
  return refuse_value(
      RefusalReason::out_of_range, channel,
      "the value " + number_text(event.values[channel]) + " or its change is out of range",
      "magnitudes are 0, or from 1e-150 to 1e150");
}

EstimateRecord Engine::Body::estimate_record(std::uint32_t panel, std::uint32_t horizon,
                                             bool with_matrices) const {
  const Lane& lane = lanes[panel];
  EstimateRecord record;
  record.sequence = lane.sequence;
  record.time_ns = lane.time_ns;
  record.panel = panel;
  record.horizon = horizon;
  record.channels_version = descriptions[panel].channels_version;
  record.estimate = lane.panel.estimate(horizon);
  if (!with_matrices || !lane.panel.scatter(horizon, scatter, centre)) return record;
  const Index p = lane.panel.channels();
  record.centre.assign(centre.data(), centre.data() + p);
  record.scatter.reserve(static_cast<std::size_t>(p * (p + 1) / 2));
  for (Index i = 0; i < p; ++i) {
    for (Index j = 0; j <= i; ++j) record.scatter.push_back(scatter(i, j));
  }
  return record;
}

void Engine::Body::publish(std::uint32_t index, std::vector<Record>& records) {
  Lane& lane = lanes[index];
  for (std::uint32_t h = 0; h < lane.scored.size(); ++h) {
    records.emplace_back(estimate_record(index, h, matrices));
    if (!std::isnan(lane.panel.estimate(h).p_value)) ++lane.scored[h];
  }
  for (const Flag& flag : lane.panel.flags()) {
    const auto h = static_cast<std::size_t>(flag.horizon);
    FlagRecord record;
    record.sequence = lane.sequence;
    record.time_ns = lane.time_ns;
    record.panel = index;
    record.horizon = static_cast<std::uint32_t>(h);
    record.flag = flag;
    record.flagged = ++lane.flagged[h];
    record.flagged_expected =
        static_cast<double>(lane.scored[h]) * lane.panel.settings().flags.rate;
    records.emplace_back(std::move(record));
  }
}

Engine::Engine(Settings settings) : body_(std::make_unique<Body>(std::move(settings))) {}
Engine::~Engine() = default;
Engine::Engine(Engine&&) noexcept = default;

void Engine::step(const SampleEvent& event, Actions& actions) {
  actions.clear();
  const std::uint64_t next = next_of(event.sender);
  if (event.sender_sequence != 0 && event.sender_sequence < next) {
    actions.accepted = actions.duplicate = true;
    ++body_->counters.duplicates;
    return;
  }
  if (event.sender_sequence > next) {
    actions.refusal = body_->refuse(RefusalReason::sequence_gap,
                                    "sample " + std::to_string(event.sender_sequence) +
                                        " of sender " + event.sender + " came too early",
                                    "send " + std::to_string(next) + " next");
  } else {
    actions.refusal = body_->check(event);
  }
  if (actions.refusal.reason != RefusalReason::none) {
    ++body_->counters.refused;
    ++body_->counters.refused_by_reason[static_cast<std::size_t>(actions.refusal.reason)];
    return;
  }
  actions.accepted = true;
  ++body_->counters.accepted;
  if (event.sender_sequence != 0) body_->expected[event.sender] = next + 1;
  body_->assembler.commit(event.values);
  body_->last_time_ns = event.time_ns;
  ++body_->sequence;
  for (std::uint32_t i = 0; i < body_->lanes.size(); ++i) {
    Lane& lane = body_->lanes[i];
    if (!lane.gather(body_->changes)) continue;
    lane.panel.push(lane.x, event.time_ns);
    lane.sequence = body_->sequence;
    lane.time_ns = event.time_ns;
    body_->publish(i, actions.records);
  }
}

void Engine::set_matrices(bool on) { body_->matrices = on; }
const Settings& Engine::settings() const { return body_->settings; }
const std::vector<PanelDescription>& Engine::descriptions() const { return body_->descriptions; }
const EngineCounters& Engine::counters() const { return body_->counters; }
std::uint64_t Engine::sequence() const { return body_->sequence; }
std::int64_t Engine::last_time_ns() const { return body_->sequence == 0 ? 0 : body_->last_time_ns; }

std::uint64_t Engine::next_of(const std::string& sender) const {
  const auto found = body_->expected.find(sender);
  return found == body_->expected.end() ? 1 : found->second;
}

EstimateRecord Engine::latest(std::uint32_t panel, std::uint32_t horizon) const {
  assert(panel < body_->lanes.size());
  return body_->estimate_record(panel, horizon, true);
}

}  // namespace tailweir

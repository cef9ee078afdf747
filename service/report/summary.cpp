#include "service/report/summary.h"

#include <algorithm>
#include <cmath>
#include <cstdarg>
#include <cstdio>

#include "service/intake/time_text.h"
#include "service/report/record_lines.h"

namespace tailweir {
namespace {

constexpr std::size_t kAlerts = 40;
constexpr std::size_t kLargest = 10;

__attribute__((format(printf, 1, 2))) std::string format(const char* pattern, ...) {
  char text[512];
  va_list arguments;
  va_start(arguments, pattern);
  const int length = std::vsnprintf(text, sizeof text, pattern, arguments);
  va_end(arguments);
  return std::string(text,
                     std::min(static_cast<std::size_t>(std::max(length, 0)), sizeof text - 1));
}

// Smaller p first, then the larger distance (p-values underflow), then the earlier sample.
bool more_extreme(const FlagRecord& a, const FlagRecord& b) {
  if (a.flag.p_value != b.flag.p_value) return a.flag.p_value < b.flag.p_value;
  if (a.flag.distance != b.flag.distance) return a.flag.distance > b.flag.distance;
  return a.sequence < b.sequence;
}

std::string nu_text(const Estimate& e) {
  if (!(e.nu > 0)) return "none yet";
  if (e.nu_status == tail::NuStatus::fixed) return format("%.4g, fixed", e.nu);
  std::string text = format("%.4g (%.4g to %.4g)", e.nu, e.nu_low, e.nu_high);
  if (e.nu_status == tail::NuStatus::at_floor) text += ", at the floor";
  if (e.nu_status == tail::NuStatus::at_ceiling) text += ", at the ceiling: no heavy tail";
  if (e.nu_status == tail::NuStatus::not_identified) text += ", not identified";
  return text;
}

std::string state_text(const Estimate& e) {
  std::string text = name_of(e.state);
  if (e.reason != StateReason::none) text += std::string(" (") + name_of(e.reason) + ")";
  return text;
}

}  // namespace

RunSummary::RunSummary(const Settings& settings, const std::vector<PanelDescription>& descriptions)
    : descriptions_(descriptions) {
  for (const PanelInput& panel : settings.panels) {
    rates_.push_back(panel.core.flags.rate);
    horizons_.emplace_back(panel.core.horizons.size());
  }
}

void RunSummary::add(const Record& record) {
  if (const auto* flag = std::get_if<FlagRecord>(&record)) {
    HorizonSummary& horizon = horizons_[flag->panel][flag->horizon];
    ++horizon.flags;
    if (flag->flag.severity == Severity::severe) ++horizon.severe;
    keep_large(*flag);
    return;
  }
  if (const auto* alert = std::get_if<AlertRecord>(&record)) {
    HorizonSummary& horizon = horizons_[alert->panel][alert->horizon];
    horizon.raised += alert->alert.stage == detect::AlertStage::raised;
    horizon.confirmed += alert->alert.stage == detect::AlertStage::confirmed;
    if (alerts_.size() < kAlerts) alerts_.push_back(*alert);
    return;
  }
  const auto& estimate = *std::get_if<EstimateRecord>(&record);
  HorizonSummary& horizon = horizons_[estimate.panel][estimate.horizon];
  ++horizon.estimates;
  if (estimate.estimate.state != HorizonState::live) ++horizon.not_live;
  if (estimate.estimate.nu > 0 && !std::isnan(estimate.estimate.p_value)) ++horizon.scored;
  horizon.last.sequence = estimate.sequence;
  horizon.last.estimate = estimate.estimate;
  if (empty_) first_time_ns_ = estimate.time_ns;
  last_time_ns_ = estimate.time_ns;
  empty_ = false;
}

void RunSummary::keep_large(const FlagRecord& record) {
  for (LargestFlag& kept : largest_) {
    if (kept.record.panel != record.panel || kept.record.sequence != record.sequence) continue;
    kept.horizons.push_back(record.horizon);
    if (more_extreme(record, kept.record)) kept.record = record;
    std::stable_sort(largest_.begin(), largest_.end(),
                     [](const auto& a, const auto& b) { return more_extreme(a.record, b.record); });
    return;
  }
  const auto at = std::find_if(largest_.begin(), largest_.end(), [&record](const auto& kept) {
    return more_extreme(record, kept.record);
  });
  if (at == largest_.end() && largest_.size() == kLargest) return;
  largest_.insert(at, {record, {record.horizon}});
  if (largest_.size() > kLargest) largest_.pop_back();
}

std::string RunSummary::panel_text(std::size_t panel) const {
  const PanelDescription& description = descriptions_[panel];
  std::string text = "panel " + description.name +
                     format(": %zu channel%s\n", description.channels.size(),
                            description.channels.size() == 1 ? "" : "s");
  for (std::size_t h = 0; h < horizons_[panel].size(); ++h) {
    const HorizonSummary& horizon = horizons_[panel][h];
    const Estimate& e = horizon.last.estimate;
    text += "  horizon " + description.horizons[h] + "\n";
    text += "    state               " + state_text(e) + "\n";
    text += format("    estimates           %llu, not live %llu\n",
                   static_cast<unsigned long long>(horizon.estimates),
                   static_cast<unsigned long long>(horizon.not_live));
    text += "    degrees of freedom  " + nu_text(e) + "\n";
    if (e.nu > 0) text += format("    log volatility      %.6g\n", e.log_volatility);
    text += format("    samples             %.6g effective\n", e.samples_effective);
    text += format("    flags               %llu, of which severe %llu; expected by chance %.3g\n",
                   static_cast<unsigned long long>(horizon.flags),
                   static_cast<unsigned long long>(horizon.severe),
                   static_cast<double>(horizon.scored) * rates_[panel]);
    text += format("    alerts              %llu raised, %llu confirmed\n",
                   static_cast<unsigned long long>(horizon.raised),
                   static_cast<unsigned long long>(horizon.confirmed));
  }
  return text;
}

std::string RunSummary::flag_text(const LargestFlag& flag) const {
  const FlagRecord& record = flag.record;
  const PanelDescription& description = descriptions_[record.panel];
  std::string text = "  " + format_time(record.time_ns) + "  sample " +
                     std::to_string(record.sequence) + "  panel " + description.name + "  horizon";
  for (std::size_t i = 0; i < flag.horizons.size(); ++i) {
    text += (i == 0 ? " " : ", ") + description.horizons[flag.horizons[i]];
  }
  text += format("\n      p-value %.3g, distance %.4g", record.flag.p_value, record.flag.distance);
  if (!record.flag.channels.empty()) {
    const ChannelBlame& blame = record.flag.channels[0];
    text +=
        ", most of it " + description.channels[static_cast<std::size_t>(blame.channel)] +
        format(": %.6g, %.3g scatter units from what the others say", blame.value, blame.residual);
  }
  return text + "\n";
}

std::string RunSummary::text(const Run& run, const EngineCounters& counters) const {
  std::string text = "settings   " + run.settings + "\nrecording  " + run.recording + "\n";
  text += format("samples    %llu accepted, %llu refused\n",
                 static_cast<unsigned long long>(counters.accepted),
                 static_cast<unsigned long long>(counters.refused));
  for (std::size_t i = 0; i < counters.refused_by_reason.size(); ++i) {
    if (counters.refused_by_reason[i] == 0) continue;
    text += format("           %llu refused: %s\n",
                   static_cast<unsigned long long>(counters.refused_by_reason[i]),
                   name_of(static_cast<RefusalReason>(i)));
  }
  if (!empty_) {
    text +=
        "time       " + format_time(first_time_ns_) + " to " + format_time(last_time_ns_) + "\n";
  }
  for (std::size_t i = 0; i < run.unused_columns.size(); ++i) {
    text += (i == 0 ? "unused     column " : "           column ") + run.unused_columns[i] + "\n";
  }
  if (!run.ended_early.empty()) text += "ended      early, at " + run.ended_early + "\n";
  for (std::size_t panel = 0; panel < horizons_.size(); ++panel) text += "\n" + panel_text(panel);
  text += alerts_.empty() ? "\nno alerts\n" : "\nalerts\n";
  for (const AlertRecord& alert : alerts_) {
    text += "  " + format_time(alert.time_ns) + "  panel " + descriptions_[alert.panel].name +
            "  horizon " + descriptions_[alert.panel].horizons[alert.horizon] + "  " +
            detect::word(alert.alert.kind) + "\n      " + alert.text + "\n";
  }
  text += largest_.empty() ? "\nno flags\n" : "\nlargest flags\n";
  for (const LargestFlag& flag : largest_) text += flag_text(flag);
  text += "\nEstimates are model outputs; check them independently before anything acts on them.\n";
  return text;
}

}  // namespace tailweir

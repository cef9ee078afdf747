#include "service/commands/tap_text.h"

#include <cmath>
#include <cstdio>
#include <nlohmann/json.hpp>

#include "service/commands/terminal.h"
#include "service/intake/time_text.h"
#include "service/report/record_lines.h"

namespace tailweir {
namespace {

// Time of day of a record, whole seconds, with the date where it matters to nobody left out.
std::string clock_text(const std::string& time) {
  return time.size() >= 19 ? time.substr(11, 8) : time;
}

std::string padded(std::string text, std::size_t width) {
  if (text.size() < width) text.append(width - text.size(), ' ');
  return text;
}

}  // namespace

std::string estimate_text(const EstimateRecord& record,
                          const std::vector<PanelDescription>& panels) {
  const PanelDescription& panel = panels[record.panel];
  const Estimate& e = record.estimate;
  std::string text = clock_text(format_time(record.time_ns)) + "  " +
                     padded(panel.name + "/" + panel.horizons[record.horizon], 24);
  if (e.state != HorizonState::live) {
    const char* state = e.state == HorizonState::impaired ? "fallback" : name_of(e.state);
    return text + padded(state, 9) + (e.reason == StateReason::none ? "" : name_of(e.reason)) +
           ", " + short_number(e.samples_effective) + " samples";
  }
  text += padded("live", 9) +
          padded("nu " + nu_text(e.nu, e.nu_low, e.nu_high, name_of(e.nu_status)), 26) + "  " +
          padded("scale " + short_number(std::exp(e.log_volatility)), 13) +
          padded("distance " + short_number(e.distance), 16) + "p " + short_number(e.p_value);
  return text;
}

std::string flag_text(const std::string& json) {
  const nlohmann::json flag = nlohmann::json::parse(json, nullptr, false);
  if (!flag.is_object() || !flag.contains("channels") || !flag["channels"].is_array()) return {};
  std::string text = clock_text(flag.value("time", "")) + "  " +
                     padded(flag.value("panel", "") + "/" + flag.value("horizon", ""), 24) +
                     padded("FLAG", 9) + flag.value("severity", "") + ", p " +
                     short_number(flag.value("p_value", 0.)) + ": ";
  int named = 0;
  for (const auto& channel : flag["channels"]) {
    if (named == 3) break;
    text += (named++ == 0 ? "" : ", ") + channel.value("name", "") + " " +
            short_number(channel.value("residual", 0.));
  }
  return text + " (conditional units; " +
         std::to_string(static_cast<long>(flag.value("flagged", 0.))) + " flags so far, " +
         short_number(flag.value("flagged_expected", 0.)) + " expected)";
}

std::string alert_text(const std::string& json) {
  const nlohmann::json alert = nlohmann::json::parse(json, nullptr, false);
  if (!alert.is_object()) return {};
  return clock_text(alert.value("time", "")) + "  " +
         padded(alert.value("panel", "") + "/" + alert.value("horizon", ""), 24) +
         padded("ALERT", 9) + alert.value("kind", "") + " " + alert.value("stage", "") + ": " +
         alert.value("text", "");
}

}  // namespace tailweir

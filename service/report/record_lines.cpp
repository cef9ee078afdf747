#include "service/report/record_lines.h"

#include <charconv>
#include <cmath>

#include "service/intake/time_text.h"

namespace tailweir {

const char* name_of(HorizonState state) {
  switch (state) {
    case HorizonState::warming:
      return "warming";
    case HorizonState::live:
      return "live";
    case HorizonState::impaired:
      return "impaired";
    case HorizonState::held:
      return "held";
  }
  return "unknown";
}

const char* name_of(StateReason reason) {
  switch (reason) {
    case StateReason::none:
      return "none";
    case StateReason::too_few_samples:
      return "too_few_samples";
    case StateReason::not_positive_definite:
      return "not_positive_definite";
    case StateReason::not_converged:
      return "not_converged";
    case StateReason::ill_conditioned:
      return "ill_conditioned";
    case StateReason::not_finite:
      return "not_finite";
  }
  return "unknown";
}

const char* name_of(tail::NuStatus status) {
  switch (status) {
    case tail::NuStatus::fixed:
      return "fixed";
    case tail::NuStatus::estimated:
      return "estimated";
    case tail::NuStatus::at_floor:
      return "at_floor";
    case tail::NuStatus::at_ceiling:
      return "at_ceiling";
    case tail::NuStatus::not_identified:
      return "not_identified";
  }
  return "unknown";
}

const char* name_of(Severity severity) {
  switch (severity) {
    case Severity::usual:
      return "usual";
    case Severity::unusual:
      return "unusual";
    case Severity::severe:
      return "severe";
  }
  return "unknown";
}

void append_number(std::string& text, double value) {
  if (!std::isfinite(value)) {
    text += "null";
    return;
  }
  char buffer[40];
  const auto [end, error] = std::to_chars(buffer, buffer + sizeof buffer, value);
  text.append(buffer, end);
}

RecordLines::RecordLines(std::vector<PanelDescription> descriptions, MatricesPolicy matrices)
    : descriptions_(std::move(descriptions)), matrices_(matrices) {}

void RecordLines::begin(std::uint64_t sequence, std::int64_t time_ns, std::uint32_t panel,
                        std::uint32_t horizon) {
  text_.clear();
  text_ += "{\"sequence\":" + std::to_string(sequence) + ",\"time\":\"";
  append_time(text_, time_ns);
  text_ += "\",\"panel\":\"" + descriptions_[panel].name + "\",\"horizon\":\"" +
           descriptions_[panel].horizons[horizon] + "\"";
}

void RecordLines::field(const char* name, double value) {
  text_ += ",\"";
  text_ += name;
  text_ += "\":";
  append_number(text_, value);
}

void RecordLines::field(const char* name, const char* word) {
  text_ += ",\"";
  text_ += name;
  text_ += "\":\"";
  text_ += word;
  text_ += '"';
}

void RecordLines::list(const char* name, const std::vector<double>& values) {
  text_ += ",\"";
  text_ += name;
  if (values.empty()) {
    text_ += "\":null";
    return;
  }
  text_ += "\":[";
  for (std::size_t k = 0; k < values.size(); ++k) {
    if (k > 0) text_ += ',';
    append_number(text_, values[k]);
  }
  text_ += ']';
}

const std::string& RecordLines::line(const Record& record) {
  if (const EstimateRecord* estimate = std::get_if<EstimateRecord>(&record)) return line(*estimate);
  return line(*std::get_if<FlagRecord>(&record));
}

const std::string& RecordLines::line(const EstimateRecord& record) {
  const Estimate& e = record.estimate;
  begin(record.sequence, record.time_ns, record.panel, record.horizon);
  field("state", name_of(e.state));
  field("state_reason", name_of(e.reason));
  field("channels", static_cast<double>(descriptions_[record.panel].channels.size()));
  field("channels_version", static_cast<double>(record.channels_version));
  field("nu", e.nu);
  field("nu_low", e.nu_low);
  field("nu_high", e.nu_high);
  field("nu_status", name_of(e.nu_status));
  field("nu_fit", e.nu_fit);
  static const std::vector<double> kNone;
  const bool matrices = matrices_.wants(record.sequence, record.flagged);
  list("centre", matrices ? record.centre : kNone);
  list("scatter", matrices ? record.scatter : kNone);
  field("covariance_factor", e.covariance_factor);
  field("samples_effective", e.samples_effective);
  field("log_volatility", e.log_volatility);
  field("residual", e.residual);
  field("iterations", e.iterations);
  field("since_polish", static_cast<double>(e.since_polish));
  field("distance", e.distance);
  field("p_value", e.p_value);
  field("coverage", e.coverage);
  field("condition", e.condition);
  text_ += record.flagged ? ",\"flagged\":true}" : ",\"flagged\":false}";
  return text_;
}

const std::string& RecordLines::line(const FlagRecord& record) {
  begin(record.sequence, record.time_ns, record.panel, record.horizon);
  field("distance", record.flag.distance);
  field("p_value", record.flag.p_value);
  field("severity", name_of(record.flag.severity));
  field("flagged", static_cast<double>(record.flagged));
  field("flagged_expected", record.flagged_expected);
  text_ += ",\"channels\":[";
  bool first = true;
  for (const ChannelBlame& blame : record.flag.channels) {
    if (!first) text_ += ',';
    first = false;
    text_ += "{\"name\":\"" +
             descriptions_[record.panel].channels[static_cast<std::size_t>(blame.channel)] + "\"";
    field("value", blame.value);
    field("residual", blame.residual);
    field("share", blame.share);
    field("p_value", blame.p_value);
    text_ += '}';
  }
  text_ += "]}";
  return text_;
}

}  // namespace tailweir

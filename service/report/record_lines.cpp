#include "service/report/record_lines.h"

#include <algorithm>
#include <cassert>
#include <charconv>
#include <cmath>

#include "service/intake/time_text.h"
#include "service/settings/names.h"

namespace tailweir {
namespace {

std::string json_text(const std::string& text) {
  constexpr const char* kHex = "0123456789abcdef";
  std::string out = "\"";
  for (const char c : text) {
    const auto byte = static_cast<unsigned char>(c);
    if (byte < 0x20) {
      out += "\\u00";
      out += kHex[byte >> 4];
      out += kHex[byte & 15];
    } else {
      if (c == '"' || c == '\\') out += '\\';
      out += c;
    }
  }
  return out + '"';
}

template <typename Number>
void put_whole(Number value, std::string& out) {
  char text[24];
  out.append(text, std::to_chars(text, text + sizeof text, value).ptr);
}

void put(double value, std::string& out) {
  if (!std::isfinite(value)) {
    out += "null";
    return;
  }
  char text[32];
  out.append(text, std::to_chars(text, text + sizeof text, value).ptr);
}

void put(const char* key, double value, std::string& out) {
  out += key;
  put(value, out);
}

void put_word(const char* key, const char* word, std::string& out) {
  out += key;
  out += '"';
  out += word;
  out += '"';
}

void put_array(const char* key, const std::vector<double>& values, bool shown, std::string& out) {
  out += key;
  if (!shown || values.empty()) {
    out += "null";
    return;
  }
  char mark = '[';
  for (const double value : values) {
    out += mark;
    put(value, out);
    mark = ',';
  }
  out += ']';
}

void put_head(std::uint64_t sequence, std::int64_t time_ns, std::string& out) {
  out += "{\"sequence\":";
  put_whole(sequence, out);
  out += ",\"time\":\"";
  append_time(out, time_ns);
  out += '"';
}

}  // namespace

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

Result<MatricesPolicy> parse_matrices_policy(const std::string& text) {
  MatricesPolicy policy;
  if (text == "every") return policy;
  if (text == "never") {
    policy.kind = MatricesPolicy::Kind::never;
    return policy;
  }
  if (text == "flagged" || text == "alerts") {
    policy.kind = MatricesPolicy::Kind::flagged;
    return policy;
  }
  const char* end = text.data() + text.size();
  const auto [stop, error] = std::from_chars(text.data(), end, policy.every);
  if (error == std::errc() && stop == end && policy.every > 0) return policy;
  return Fault{"--matrices", quoted(text) + " is no choice",
               "write every, a whole number, flagged or never"};
}

RecordLines::RecordLines(const std::vector<PanelDescription>& descriptions, MatricesPolicy matrices)
    : matrices_(matrices) {
  for (const PanelDescription& description : descriptions) {
    Pieces pieces;
    for (const std::string& horizon : description.horizons) {
      pieces.panel_and_horizon.push_back(",\"panel\":" + json_text(description.name) +
                                         ",\"horizon\":" + json_text(horizon));
    }
    for (const std::string& channel : description.channels) {
      pieces.channel.push_back(json_text(channel));
    }
    pieces_.push_back(std::move(pieces));
  }
}

bool RecordLines::has(std::uint32_t panel, std::uint32_t horizon) const {
  return panel < pieces_.size() && horizon < pieces_[panel].panel_and_horizon.size();
}

bool RecordLines::knows(const EstimateRecord& record) const {
  if (!has(record.panel, record.horizon)) return false;
  const std::size_t p = pieces_[record.panel].channel.size();
  return (record.centre.empty() || record.centre.size() == p) &&
         (record.scatter.empty() || record.scatter.size() == p * (p + 1) / 2);
}

bool RecordLines::knows(const FlagRecord& record) const {
  if (!has(record.panel, record.horizon)) return false;
  const auto p = static_cast<Index>(pieces_[record.panel].channel.size());
  return std::all_of(
      record.flag.channels.begin(), record.flag.channels.end(),
      [p](const ChannelBlame& blame) { return blame.channel >= 0 && blame.channel < p; });
}

bool RecordLines::knows(const AlertRecord& record) const {
  if (!has(record.panel, record.horizon)) return false;
  const auto p = static_cast<Index>(pieces_[record.panel].channel.size());
  return record.alert.first < p && record.alert.second < p;
}

bool RecordLines::knows(const Record& record) const {
  return std::visit([this](const auto& one) { return knows(one); }, record);
}

void RecordLines::append(const Record& record, std::string& out) const {
  if (const auto* estimate = std::get_if<EstimateRecord>(&record)) {
    append(*estimate, matrices_.wants(estimate->sequence, estimate->flagged), out);
  } else if (const auto* flag = std::get_if<FlagRecord>(&record)) {
    append(*flag, out);
  } else {
    append(*std::get_if<AlertRecord>(&record), out);
  }
}

void RecordLines::append(const EstimateRecord& record, bool matrices, std::string& out) const {
  assert(knows(record));
  const Pieces& pieces = pieces_[record.panel];
  const Estimate& e = record.estimate;
  // Before the first fit nothing about it is defined, whatever the members hold.
  const double nothing = std::nan("");
  const bool fitted = e.nu > 0;
  const auto of_fit = [&](double value) { return fitted ? value : nothing; };
  put_head(record.sequence, record.time_ns, out);
  out += pieces.panel_and_horizon[record.horizon];
  put_word(",\"state\":", name_of(e.state), out);
  put_word(",\"state_reason\":", name_of(e.reason), out);
  out += ",\"channels\":";
  put_whole(pieces.channel.size(), out);
  out += ",\"channels_version\":";
  put_whole(record.channels_version, out);
  put(",\"nu\":", of_fit(e.nu), out);
  put(",\"nu_low\":", of_fit(e.nu_low), out);
  put(",\"nu_high\":", of_fit(e.nu_high), out);
  put_word(",\"nu_status\":", name_of(e.nu_status), out);
  put(",\"nu_fit\":", of_fit(e.nu_fit), out);
  put_array(",\"centre\":", record.centre, matrices, out);
  put_array(",\"scatter\":", record.scatter, matrices, out);
  put(",\"covariance_factor\":", e.nu > 2 ? e.covariance_factor : nothing, out);
  put(",\"samples_effective\":", e.samples_effective, out);
  put(",\"log_volatility\":", of_fit(e.log_volatility), out);
  put(",\"residual\":", of_fit(e.residual), out);
  out += ",\"iterations\":";
  put_whole(e.iterations, out);
  out += ",\"since_polish\":";
  put_whole(e.since_polish, out);
  put(",\"distance\":", of_fit(e.distance), out);
  put(",\"p_value\":", of_fit(e.p_value), out);
  put(",\"coverage\":", e.coverage, out);
  if (!record.channel_coverage.empty()) {
    put_array(",\"channel_coverage\":", record.channel_coverage, true, out);
  }
  put(",\"condition\":", of_fit(e.condition), out);
  out += record.flagged ? ",\"flagged\":true}\n" : ",\"flagged\":false}\n";
}

void RecordLines::append(const FlagRecord& record, std::string& out) const {
  assert(knows(record));
  const Pieces& pieces = pieces_[record.panel];
  put_head(record.sequence, record.time_ns, out);
  out += pieces.panel_and_horizon[record.horizon];
  put(",\"distance\":", record.flag.distance, out);
  put(",\"p_value\":", record.flag.p_value, out);
  put(",\"joint_p_value\":", record.flag.joint_p_value, out);
  put(",\"rank_p_value\":", record.flag.rank_p_value, out);
  put_word(",\"severity\":", name_of(record.flag.severity), out);
  out += ",\"flagged\":";
  put_whole(record.flagged, out);
  put(",\"flagged_expected\":", record.flagged_expected, out);
  out += ",\"channels\":[";
  for (std::size_t i = 0; i < record.flag.channels.size(); ++i) {
    const ChannelBlame& blame = record.flag.channels[i];
    out += i == 0 ? "{\"name\":" : ",{\"name\":";
    out += pieces.channel[static_cast<std::size_t>(blame.channel)];
    put(",\"value\":", blame.value, out);
    put(",\"residual\":", blame.residual, out);
    put(",\"share\":", blame.share, out);
    put(",\"p_value\":", blame.p_value, out);
    out += '}';
  }
  out += "]}\n";
}

void RecordLines::append(const AlertRecord& record, std::string& out) const {
  assert(knows(record));
  const Pieces& pieces = pieces_[record.panel];
  const detect::Alert& alert = record.alert;
  put_head(record.sequence, record.time_ns, out);
  out += pieces.panel_and_horizon[record.horizon];
  out += ",\"id\":";
  put_whole(alert.id, out);
  put_word(",\"kind\":", detect::word(alert.kind), out);
  put_word(",\"direction\":", detect::word(alert.direction), out);
  put_word(",\"stage\":", detect::word(alert.stage), out);
  put(",\"statistic\":", alert.statistic, out);
  put(",\"threshold\":", alert.threshold, out);
  out += ",\"since\":";
  put_whole(record.since, out);
  put(",\"from\":", alert.from, out);
  put(",\"to\":", alert.to, out);
  put(",\"confidence\":", detect::confidence(alert), out);
  out += ",\"channels\":[";
  if (alert.first >= 0 && alert.second >= 0) {
    out += pieces.channel[static_cast<std::size_t>(alert.first)] + "," +
           pieces.channel[static_cast<std::size_t>(alert.second)];
  }
  out += ']';
  put_word(",\"text\":", record.text.c_str(), out);
  out += "}\n";
}

}  // namespace tailweir

#include "service/wire/messages.h"

#include <cmath>
#include <cstring>
#include <nlohmann/json.hpp>

#include "service/wire/crc32c.h"

namespace tailweir::wire {
namespace {

using Json = nlohmann::json;

// Fixed block of an estimate: 8 integers and 12 numbers, then centre and scatter.
constexpr std::size_t kIntegers = 8;
constexpr std::size_t kNumbers = 12;
constexpr std::size_t kFixedBytes = (kIntegers + kNumbers) * 8;

Fault wrong(std::string what, std::string allowed) {
  return {"frame", std::move(what), std::move(allowed)};
}

template <typename Value>
void append(std::string& bytes, Value value) {
  static_assert(sizeof value == 8);
  bytes.append(reinterpret_cast<const char*>(&value), sizeof value);
}

template <typename Value>
Value at(std::string_view bytes, std::size_t index) {
  static_assert(sizeof(Value) == 8);
  Value value;
  std::memcpy(&value, bytes.data() + 8 * index, sizeof value);
  return value;
}

std::string encode_json(std::string_view topic, Header header, const Json& json) {
  return encode(topic, header, json.dump());
}

// Parses a payload without exceptions; a discarded value when it is not JSON.
Json parse(const View& view) { return Json::parse(view.payload, nullptr, false); }

std::string text_of(const Json& json, const char* key) {
  const auto found = json.find(key);
  return found != json.end() && found->is_string() ? found->get<std::string>() : std::string();
}

std::uint64_t count_of(const Json& json, const char* key) {
  const auto found = json.find(key);
  return found != json.end() && found->is_number_unsigned() ? found->get<std::uint64_t>() : 0;
}

bool names_of(const Json& json, const char* key, std::vector<std::string>& names) {
  const auto found = json.find(key);
  if (found == json.end() || !found->is_array() || found->size() > kMostChannels) return false;
  for (const Json& name : *found) {
    if (!name.is_string()) return false;
    names.push_back(name.get<std::string>());
  }
  return true;
}

}  // namespace

std::uint32_t channels_hash(const std::vector<std::string>& channels) {
  std::string joined;
  for (const std::string& name : channels) joined += name + "\n";
  return crc32c(joined.data(), joined.size());
}

std::string encode_samples(const std::vector<WireSample>& samples, std::uint32_t channels,
                           std::uint32_t hash, std::uint64_t epoch) {
  std::string payload;
  payload.reserve(samples.size() * (16 + 8 * channels));
  for (const WireSample& sample : samples) {
    append(payload, sample.sequence);
    append(payload, sample.time_ns);
    payload.append(reinterpret_cast<const char*>(sample.values.data()), 8 * sample.values.size());
  }
  Header header;
  header.kind = Kind::samples;
  header.epoch = epoch;
  header.channels = channels;
  header.count = static_cast<std::uint32_t>(samples.size());
  header.channels_version = hash;
  if (!samples.empty()) {
    header.sequence = samples.front().sequence;
    header.time_ns = samples.front().time_ns;
  }
  return encode("samples", header, payload);
}

Result<std::vector<WireSample>> decode_samples(const View& view) {
  const std::size_t each = 16 + 8 * static_cast<std::size_t>(view.header.channels);
  if (view.header.channels == 0 || view.payload.size() != each * view.header.count) {
    return wrong("holds " + std::to_string(view.payload.size()) + " bytes for " +
                     std::to_string(view.header.count) + " samples of " +
                     std::to_string(view.header.channels) + " channels",
                 std::to_string(each) + " bytes a sample");
  }
  std::vector<WireSample> samples(view.header.count);
  for (std::size_t k = 0; k < samples.size(); ++k) {
    const std::string_view bytes = view.payload.substr(k * each, each);
    samples[k].sequence = at<std::uint64_t>(bytes, 0);
    samples[k].time_ns = at<std::int64_t>(bytes, 1);
    samples[k].values.resize(view.header.channels);
    std::memcpy(samples[k].values.data(), bytes.data() + 16, 8 * samples[k].values.size());
  }
  return samples;
}

std::string estimate_topic(const PanelDescription& panel, std::uint32_t horizon) {
  return "estimate/" + panel.name + "/" + panel.horizons[horizon];
}

std::string flag_topic(const PanelDescription& panel) { return "flag/" + panel.name; }
std::string alert_topic(const PanelDescription& panel) { return "alert/" + panel.name; }

std::string encode_estimate(const EstimateRecord& record, const PanelDescription& panel,
                            std::uint64_t epoch, std::uint32_t number) {
  const Estimate& e = record.estimate;
  std::string payload;
  payload.reserve(kFixedBytes + 8 * (record.centre.size() + record.scatter.size()));
  for (const std::int64_t value :
       {static_cast<std::int64_t>(record.panel), static_cast<std::int64_t>(record.horizon),
        static_cast<std::int64_t>(e.state), static_cast<std::int64_t>(e.reason),
        static_cast<std::int64_t>(e.nu_status), static_cast<std::int64_t>(e.iterations),
        e.since_polish, std::int64_t{0}}) {
    append(payload, value);
  }
  for (const double value :
       {e.nu, e.nu_low, e.nu_high, e.nu_fit, e.covariance_factor, e.samples_effective,
        e.log_volatility, e.residual, e.distance, e.p_value, e.coverage, e.condition}) {
    append(payload, value);
  }
  for (const double value : record.centre) append(payload, value);
  for (const double value : record.scatter) append(payload, value);
  for (const double value : record.channel_coverage) append(payload, value);
  Header header;
  header.kind = Kind::estimate;
  header.flags = (record.flagged ? kFlagged : 0) | (record.scatter.empty() ? 0 : kMatrices) |
                 (record.channel_coverage.empty() ? 0 : kCoverage);
  header.epoch = epoch;
  header.sequence = record.sequence;
  header.time_ns = record.time_ns;
  header.channels = static_cast<std::uint32_t>(panel.channels.size());
  header.count = 1;
  header.channels_version = record.channels_version;
  header.number = number;
  return encode(estimate_topic(panel, record.horizon), header, payload);
}

Result<EstimateRecord> decode_estimate(const View& view) {
  const std::size_t p = view.header.channels;
  const bool matrices = (view.header.flags & kMatrices) != 0;
  const bool coverage = (view.header.flags & kCoverage) != 0;
  const std::size_t expected =
      kFixedBytes + (matrices ? 8 * (p + p * (p + 1) / 2) : 0) + (coverage ? 8 * p : 0);
  if (view.header.kind != Kind::estimate || view.payload.size() != expected) {
    return wrong("is not an estimate of " + std::to_string(p) + " channels",
                 std::to_string(expected) + " payload bytes");
  }
  EstimateRecord record;
  record.sequence = view.header.sequence;
  record.time_ns = view.header.time_ns;
  record.channels_version = view.header.channels_version;
  record.flagged = (view.header.flags & kFlagged) != 0;
  record.panel = static_cast<std::uint32_t>(at<std::int64_t>(view.payload, 0));
  record.horizon = static_cast<std::uint32_t>(at<std::int64_t>(view.payload, 1));
  Estimate& e = record.estimate;
  e.state = static_cast<HorizonState>(at<std::int64_t>(view.payload, 2));
  e.reason = static_cast<StateReason>(at<std::int64_t>(view.payload, 3));
  e.nu_status = static_cast<tail::NuStatus>(at<std::int64_t>(view.payload, 4));
  e.iterations = static_cast<int>(at<std::int64_t>(view.payload, 5));
  e.since_polish = at<std::int64_t>(view.payload, 6);
  double* const numbers[kNumbers] = {&e.nu,
                                     &e.nu_low,
                                     &e.nu_high,
                                     &e.nu_fit,
                                     &e.covariance_factor,
                                     &e.samples_effective,
                                     &e.log_volatility,
                                     &e.residual,
                                     &e.distance,
                                     &e.p_value,
                                     &e.coverage,
                                     &e.condition};
  for (std::size_t k = 0; k < kNumbers; ++k) *numbers[k] = at<double>(view.payload, kIntegers + k);
  if (matrices) {
    record.centre.resize(p);
    record.scatter.resize(p * (p + 1) / 2);
    std::memcpy(record.centre.data(), view.payload.data() + kFixedBytes, 8 * p);
    std::memcpy(record.scatter.data(), view.payload.data() + kFixedBytes + 8 * p,
                8 * record.scatter.size());
  }
  if (coverage) {
    record.channel_coverage.resize(p);
    std::memcpy(record.channel_coverage.data(), view.payload.data() + expected - 8 * p, 8 * p);
  }
  return record;
}

std::string encode_hello(const Hello& hello) {
  Header header;
  header.kind = Kind::hello;
  return encode_json("hello", header, {{"sender", hello.sender}, {"channels", hello.channels}});
}

Result<Hello> decode_hello(const View& view) {
  const Json json = parse(view);
  Hello hello;
  if (json.is_object()) hello.sender = text_of(json, "sender");
  if (!json.is_object() || hello.sender.empty() || hello.sender.size() > 63 ||
      !names_of(json, "channels", hello.channels)) {
    return wrong("is not a hello", "{\"sender\": NAME, \"channels\": [NAME, ...]}");
  }
  return hello;
}

std::string encode_welcome(std::uint64_t next, bool durable, std::uint64_t epoch) {
  Header header;
  header.kind = Kind::welcome;
  header.epoch = epoch;
  header.sequence = next;
  header.flags = durable ? kDurable : 0;
  return encode_json("welcome", header, {{"next", next}, {"durable", durable}});
}

Result<std::uint64_t> decode_welcome(const View& view) {
  if (view.header.kind != Kind::welcome || view.header.sequence == 0) {
    return wrong("is not a welcome", "a welcome with the next sequence");
  }
  return view.header.sequence;
}

std::string encode_ack(std::uint64_t up_to, bool durable, std::uint64_t epoch) {
  Header header;
  header.kind = Kind::ack;
  header.epoch = epoch;
  header.sequence = up_to;
  header.flags = durable ? kDurable : 0;
  return encode("ack", header, "");
}

std::string encode_refusal(const RefusalNote& note, std::uint64_t epoch) {
  Header header;
  header.kind = Kind::refusal;
  header.epoch = epoch;
  header.sequence = note.sequence;
  // Text from outside may hold bytes that are not UTF-8: replace them rather than throw.
  const Json json = {{"sequence", note.sequence}, {"reason", note.reason}, {"text", note.text}};
  return encode("refusal", header, json.dump(-1, ' ', false, Json::error_handler_t::replace));
}

Result<RefusalNote> decode_refusal(const View& view) {
  const Json json = parse(view);
  if (!json.is_object()) return wrong("is not a refusal", "a JSON object");
  return RefusalNote{count_of(json, "sequence"), text_of(json, "reason"), text_of(json, "text")};
}

std::string encode_description(const std::vector<PanelDescription>& panels, std::uint64_t epoch) {
  Header header;
  header.kind = Kind::description;
  header.epoch = epoch;
  Json list = Json::array();
  for (const PanelDescription& panel : panels) {
    list.push_back({{"name", panel.name},
                    {"channels", panel.channels},
                    {"horizons", panel.horizons},
                    {"channels_version", panel.channels_version}});
  }
  return encode_json("describe", header, {{"panels", list}});
}

Result<std::vector<PanelDescription>> decode_description(const View& view) {
  const Json json = parse(view);
  const Fault bad = wrong("is not a description", "{\"panels\": [...]}");
  if (!json.is_object() || !json.contains("panels") || !json["panels"].is_array()) return bad;
  std::vector<PanelDescription> panels;
  for (const Json& entry : json["panels"]) {
    PanelDescription panel;
    if (!entry.is_object() || !names_of(entry, "channels", panel.channels) ||
        !names_of(entry, "horizons", panel.horizons)) {
      return bad;
    }
    panel.name = text_of(entry, "name");
    panel.channels_version = static_cast<std::uint32_t>(count_of(entry, "channels_version"));
    panels.push_back(std::move(panel));
  }
  return panels;
}

std::string encode_pulse(const Pulse& pulse, std::int64_t wall_ns, std::uint64_t epoch,
                         std::uint32_t number) {
  Header header;
  header.kind = Kind::pulse;
  header.epoch = epoch;
  header.sequence = pulse.sequence;
  header.time_ns = wall_ns;
  header.number = number;
  Json reasons = Json::object();
  for (std::size_t k = 1; k < pulse.refused_by_reason.size(); ++k) {
    if (pulse.refused_by_reason[k] > 0) {
      reasons[name_of(static_cast<RefusalReason>(k))] = pulse.refused_by_reason[k];
    }
  }
  return encode_json("pulse", header,
                     {{"sequence", pulse.sequence},
                      {"duplicates", pulse.duplicates},
                      {"refused", pulse.refused},
                      {"refused_by_reason", reasons},
                      {"lost", pulse.lost},
                      {"bad_frames", pulse.bad_frames}});
}

}  // namespace tailweir::wire

// The payloads: samples and estimates as float64, everything rare as JSON (page: README.md).
//
// Every decode checks counts against the payload's length. Thread rule: pure functions.
#pragma once

#include <cstdint>
#include <string>
#include <vector>

#include "core/result.h"
#include "service/engine/engine.h"
#include "service/engine/records.h"
#include "service/wire/frame.h"

namespace tailweir::wire {

struct WireSample {
  std::uint64_t sequence = 0;
  std::int64_t time_ns = 0;
  std::vector<double> values;
};

// What identifies a list of channels in a samples frame.
std::uint32_t channels_hash(const std::vector<std::string>& channels);

std::string encode_samples(const std::vector<WireSample>& samples, std::uint32_t channels,
                           std::uint32_t hash, std::uint64_t epoch);
Result<std::vector<WireSample>> decode_samples(const View& view);

std::string estimate_topic(const PanelDescription& panel, std::uint32_t horizon);
std::string encode_estimate(const EstimateRecord& record, const PanelDescription& panel,
                            std::uint64_t epoch, std::uint32_t number);
Result<EstimateRecord> decode_estimate(const View& view);

std::string flag_topic(const PanelDescription& panel);
std::string alert_topic(const PanelDescription& panel);

// JSON payloads. hello: who sends which channels. welcome: the next sequence expected.
struct Hello {
  std::string sender;
  std::vector<std::string> channels;
};
std::string encode_hello(const Hello& hello);
Result<Hello> decode_hello(const View& view);
std::string encode_welcome(std::uint64_t next, bool durable, std::uint64_t epoch);
Result<std::uint64_t> decode_welcome(const View& view);
std::string encode_ack(std::uint64_t up_to, bool durable, std::uint64_t epoch);
struct RefusalNote {
  std::uint64_t sequence = 0;  // of the sample; 0 when the whole message was refused
  std::string reason, text;
};
std::string encode_refusal(const RefusalNote& note, std::uint64_t epoch);
Result<RefusalNote> decode_refusal(const View& view);

std::string encode_description(const std::vector<PanelDescription>& panels, std::uint64_t epoch);
Result<std::vector<PanelDescription>> decode_description(const View& view);

struct Pulse {
  std::uint64_t sequence = 0, duplicates = 0, refused = 0, lost = 0, bad_frames = 0;
  std::vector<std::uint64_t> refused_by_reason;
};
std::string encode_pulse(const Pulse& pulse, std::int64_t wall_ns, std::uint64_t epoch,
                         std::uint32_t number);

}  // namespace tailweir::wire

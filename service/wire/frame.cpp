#include "service/wire/frame.h"

#include <bit>
#include <cassert>
#include <cstring>

#include "service/wire/crc32c.h"

namespace tailweir::wire {
namespace {

static_assert(std::endian::native == std::endian::little, "the wire is written as memory has it");

constexpr std::size_t kChecksumOffset = kTopicBytes + 12;

template <typename Value>
void put(std::string& frame, std::size_t offset, Value value) {
  std::memcpy(frame.data() + offset, &value, sizeof value);
}

template <typename Value>
Value get(std::string_view frame, std::size_t offset) {
  Value value;
  std::memcpy(&value, frame.data() + offset, sizeof value);
  return value;
}

std::uint32_t checksum(std::string_view frame) {
  const std::uint32_t zero = 0;
  std::uint32_t sum = crc32c(frame.data(), kChecksumOffset);
  sum = crc32c(&zero, sizeof zero, sum);
  const std::size_t after = kChecksumOffset + sizeof zero;
  return crc32c(frame.data() + after, frame.size() - after, sum);
}

Fault wrong(std::string what, std::string allowed) {
  return {"frame", std::move(what), std::move(allowed)};
}

}  // namespace

std::string encode(std::string_view topic, const Header& header, std::string_view payload) {
  assert(topic.size() < kTopicBytes && payload.size() + kPayloadOffset <= kLargestFrame);
  std::string frame(kPayloadOffset + payload.size(), '\0');
  std::memcpy(frame.data(), topic.data(), topic.size());
  const std::size_t h = kTopicBytes;
  put(frame, h, kMagic);
  put(frame, h + 4, kVersion);
  put(frame, h + 6, static_cast<std::uint16_t>(header.kind));
  put(frame, h + 8, header.flags);
  put(frame, h + 16, header.epoch);
  put(frame, h + 24, header.sequence);
  put(frame, h + 32, header.time_ns);
  put(frame, h + 40, header.channels);
  put(frame, h + 44, header.count);
  put(frame, h + 48, static_cast<std::uint64_t>(payload.size()));
  put(frame, h + 56, header.channels_version);
  put(frame, h + 60, header.number);
  if (!payload.empty()) std::memcpy(frame.data() + kPayloadOffset, payload.data(), payload.size());
  put(frame, kChecksumOffset, checksum(frame));
  return frame;
}

Result<View> decode(std::string_view frame) {
  if (frame.size() < kPayloadOffset) {
    return wrong("has " + std::to_string(frame.size()) + " bytes, too short for a header",
                 "at least " + std::to_string(kPayloadOffset));
  }
  if (frame.size() > kLargestFrame) return wrong("is too long", "at most 256 MB");
  const std::size_t h = kTopicBytes;
  if (get<std::uint32_t>(frame, h) != kMagic) {
    return wrong("does not carry the magic number", "a tailweir frame, service/wire/README.md");
  }
  const std::uint16_t version = get<std::uint16_t>(frame, h + 4);
  if (version != kVersion) {
    return wrong("has version " + std::to_string(version), "version " + std::to_string(kVersion));
  }
  const std::uint16_t kind = get<std::uint16_t>(frame, h + 6);
  if (kind == 0 || kind > kLastKind) {
    return wrong("has kind " + std::to_string(kind), "1 to " + std::to_string(kLastKind));
  }
  const std::uint64_t bytes = get<std::uint64_t>(frame, h + 48);
  if (bytes != frame.size() - kPayloadOffset) {
    return wrong("carries " + std::to_string(frame.size() - kPayloadOffset) +
                     " payload bytes and says " + std::to_string(bytes),
                 "the length the header says");
  }
  if (get<std::uint32_t>(frame, kChecksumOffset) != checksum(frame)) {
    return wrong("has a wrong checksum", "CRC-32C of the frame");
  }
  View view;
  view.topic = frame.substr(0, kTopicBytes);
  const std::size_t end = view.topic.find('\0');
  if (end == std::string_view::npos)
    return wrong("has a topic without an end", "a NUL-padded topic");
  view.topic = view.topic.substr(0, end);
  view.header.kind = static_cast<Kind>(kind);
  view.header.flags = get<std::uint32_t>(frame, h + 8);
  view.header.epoch = get<std::uint64_t>(frame, h + 16);
  view.header.sequence = get<std::uint64_t>(frame, h + 24);
  view.header.time_ns = get<std::int64_t>(frame, h + 32);
  view.header.channels = get<std::uint32_t>(frame, h + 40);
  view.header.count = get<std::uint32_t>(frame, h + 44);
  view.header.channels_version = get<std::uint32_t>(frame, h + 56);
  view.header.number = get<std::uint32_t>(frame, h + 60);
  if (view.header.channels > kMostChannels) {
    return wrong("speaks of " + std::to_string(view.header.channels) + " channels",
                 "at most " + std::to_string(kMostChannels));
  }
  view.payload = frame.substr(kPayloadOffset);
  return view;
}

}  // namespace tailweir::wire

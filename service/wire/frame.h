// One message, one frame: topic | header | payload, little-endian, fixed offsets (page: README.md).
//
// decode() checks everything it can before anyone looks at the payload: size, topic, magic,
// version, kind, counts, payload length and checksum. It never reads beyond the frame. Thread rule:
// pure functions.
#pragma once

#include <cstddef>
#include <cstdint>
#include <string>
#include <string_view>

#include "core/result.h"

namespace tailweir::wire {

constexpr std::size_t kTopicBytes = 80;
constexpr std::size_t kHeaderBytes = 64;
constexpr std::size_t kPayloadOffset = kTopicBytes + kHeaderBytes;  // 144, a multiple of 8
constexpr std::uint32_t kMagic = 0x52574C54;                        // the bytes T L W R
constexpr std::uint16_t kVersion = 1;
constexpr std::size_t kLargestFrame = std::size_t{1} << 28;
constexpr std::uint32_t kMostChannels = 4096;

// Values never change meaning.
enum class Kind : std::uint16_t {
  samples = 1,
  estimate = 2,
  flag = 3,
  alert = 4,
  pulse = 5,
  description = 6,
  hello = 7,
  welcome = 8,
  ack = 9,
  refusal = 10,
  ask = 11,
  reply = 12
};
constexpr std::uint16_t kLastKind = 12;

// Bits of Header::flags.
constexpr std::uint32_t kFlagged = 1;   // estimate: this sample is flagged
constexpr std::uint32_t kMatrices = 2;  // estimate: centre and scatter follow
constexpr std::uint32_t kCoverage = 8;  // estimate: coverage of each channel follows
constexpr std::uint32_t kDurable = 4;   // ack: what is acknowledged survives a crash

struct Header {
  Kind kind = Kind::pulse;
  std::uint32_t flags = 0;
  std::uint64_t epoch = 0;     // of the source: changes when it starts again
  std::uint64_t sequence = 0;  // of the sample; in an ack the last one received
  std::int64_t time_ns = 0;    // of the sample; wall clock in a pulse
  std::uint32_t channels = 0;
  std::uint32_t count = 0;  // samples in the payload
  std::uint32_t channels_version =
      0;                     // in samples: CRC-32C of the channel names, joined by newlines
  std::uint32_t number = 0;  // messages on this topic so far: a gap is a loss
};

// A frame's parts; views into the bytes given to decode().
struct View {
  std::string_view topic;
  Header header;
  std::string_view payload;
};

// topic: at most 79 bytes. Precondition: payload fits kLargestFrame.
std::string encode(std::string_view topic, const Header& header, std::string_view payload);

// Fault: where is "frame", what says what is wrong.
Result<View> decode(std::string_view frame);

}  // namespace tailweir::wire

// Frames: known checksums, golden bytes, round trips, and damaged ones by the thousand.

#include <gtest/gtest.h>

#include <boost/crc.hpp>
#include <cmath>
#include <cstring>
#include <fstream>
#include <limits>
#include <random>
#include <sstream>

#include "service/intake/desk.h"
#include "service/settings/settings.h"
#include "service/wire/crc32c.h"
#include "service/wire/messages.h"

namespace tailweir {
namespace {

using namespace wire;

// Cited values: RFC 3720, appendix B.4, and the usual check value; Boost.CRC as second opinion.
TEST(Crc32c, MatchesRfc3720AndBoost) {
  const std::string zeros(32, '\0'), ones(32, '\xff');
  EXPECT_EQ(crc32c(zeros.data(), 32), 0x8A9136AAu);
  EXPECT_EQ(crc32c(ones.data(), 32), 0x62A8AB43u);
  EXPECT_EQ(crc32c("123456789", 9), 0xE3069283u);
  boost::crc_optimal<32, 0x1EDC6F41, 0xFFFFFFFF, 0xFFFFFFFF, true, true> boost_crc;
  std::string bytes;
  for (int k = 0; k < 1000; ++k) bytes += static_cast<char>(k * k);
  boost_crc.process_bytes(bytes.data(), bytes.size());
  EXPECT_EQ(crc32c(bytes.data(), bytes.size()), boost_crc.checksum());
  EXPECT_EQ(crc32c(bytes.data() + 100, 900, crc32c(bytes.data(), 100)), boost_crc.checksum());
}

EstimateRecord example() {
  EstimateRecord record;
  record.sequence = 42;
  record.time_ns = 1772438460000000000;
  record.flagged = true;
  record.estimate.state = HorizonState::live;
  record.estimate.reason = StateReason::none;
  record.estimate.nu = 4.25;
  record.estimate.nu_low = 3;
  record.estimate.nu_high = 6.5;
  record.estimate.nu_fit = 4.25;
  record.estimate.nu_status = tail::NuStatus::estimated;
  record.estimate.covariance_factor = std::nan("");
  record.estimate.samples_effective = 250;
  record.estimate.iterations = 3;
  record.estimate.since_polish = 17;
  record.estimate.distance = 9.5;
  record.centre = {1, 2};
  record.scatter = {1.5, -.25, 2};
  return record;
}

PanelDescription panel() {
  PanelDescription description;
  description.name = "metals";
  description.channels = {"copper", "tin"};
  description.horizons = {"slow"};
  return description;
}

std::string hex(const std::string& bytes) {
  static const char* const kDigits = "0123456789abcdef";
  std::string text;
  for (const char c : bytes) {
    text += kDigits[static_cast<unsigned char>(c) >> 4];
    text += kDigits[static_cast<unsigned char>(c) & 15];
  }
  return text;
}

// Golden vectors: the bytes of the wire may only change with its version.
TEST(Wire, MatchesGoldenBytes) {
  const std::string folder = std::string(TAILWEIR_SOURCE_DIR) + "/tests/service/golden/";
  const auto golden = [&](const std::string& name) {
    std::ifstream file(folder + name);
    std::ostringstream text;
    text << file.rdbuf();
    std::string digits;
    for (const char c : text.str()) {
      if (std::isxdigit(static_cast<unsigned char>(c)) != 0) digits += c;
    }
    return digits;
  };
  EXPECT_EQ(hex(encode_estimate(example(), panel(), 7, 3)), golden("estimate.hex"));
  EXPECT_EQ(hex(encode_samples({{1, 1000, {1, -2}}, {2, 2000, {.5, 1e-3}}}, 2,
                               channels_hash({"copper", "tin"}), 7)),
            golden("samples.hex"));
  EXPECT_EQ(hex(encode_ack(99, false, 7)), golden("ack.hex"));
}

TEST(Wire, EstimateSurvivesTheRoundTrip) {
  const EstimateRecord sent = example();
  const std::string frame = encode_estimate(sent, panel(), 7, 3);
  Result<View> view = decode(frame);
  ASSERT_TRUE(view) << view.fault().line();
  EXPECT_EQ(view.value().topic, "estimate/metals/slow");
  Result<EstimateRecord> got = decode_estimate(view.value());
  ASSERT_TRUE(got);
  EXPECT_EQ(got.value().sequence, 42u);
  EXPECT_EQ(got.value().centre, sent.centre);
  EXPECT_EQ(got.value().scatter, sent.scatter);
  EXPECT_TRUE(got.value().flagged);
  EXPECT_EQ(got.value().estimate.since_polish, 17);
  EXPECT_TRUE(std::isnan(got.value().estimate.covariance_factor));
}

TEST(Wire, RefusesEachKindOfDamage) {
  const std::string good = encode_samples({{1, 1000, {1, 2}}}, 2, 5, 7);
  const auto fault = [](std::string frame) {
    Result<View> view = decode(frame);
    if (!view) return view.fault().what;
    Result<std::vector<WireSample>> samples = decode_samples(view.value());
    return samples ? std::string("accepted") : samples.fault().what;
  };
  EXPECT_EQ(fault(good), "accepted");
  EXPECT_NE(fault(good.substr(0, 100)).find("too short"), std::string::npos);
  EXPECT_NE(fault(good + "x").find("payload bytes"), std::string::npos);
  EXPECT_NE(fault(good.substr(0, good.size() - 1)).find("payload bytes"), std::string::npos);
  const auto with = [&](std::size_t offset, char value) {
    std::string frame = good;
    frame[offset] = value;
    return frame;
  };
  EXPECT_NE(fault(with(80, 'x')).find("magic"), std::string::npos);
  EXPECT_NE(fault(with(84, 9)).find("version"), std::string::npos);
  EXPECT_NE(fault(with(86, 99)).find("kind"), std::string::npos);
  EXPECT_NE(fault(with(150, 1)).find("checksum"), std::string::npos);
  EXPECT_NE(fault(with(92, 1)).find("checksum"), std::string::npos);
  // A wrong count with a right checksum.
  Header header;
  header.kind = Kind::samples;
  header.channels = 3;
  header.count = 1;
  EXPECT_NE(fault(encode("samples", header, std::string(32, '\0'))).find("bytes for"),
            std::string::npos);
  header.count = 0xFFFFFFFF;
  header.channels = 4096;
  EXPECT_NE(fault(encode("samples", header, std::string(32, '\0'))).find("bytes for"),
            std::string::npos);
}

Settings two_channels() {
  Result<Settings> settings = parse_settings(
      "channels: [a, b]\npanels:\n  - {name: p, channels: all, horizons: [{name: h, window: "
      "20}]}\n",
      "test");
  return settings.value();
}

// Property: damaged frames never get through to the engine, whatever is damaged (seed 1).
TEST(IntakeDesk, SurvivesMutatedFrames) {
  Engine engine(two_channels());
  IntakeDesk desk(engine, 1, [](const std::vector<Record>&) {});
  ASSERT_EQ(desk.from_peer("x", encode_hello({"s", {"b", "a"}})).size(), 1u);
  std::mt19937_64 bits(1);
  const std::vector<std::string> seeds = {
      encode_samples({{1, 1000, {1, 2}}, {2, 1001, {3, 4}}}, 2, channels_hash({"b", "a"}), 0),
      encode_hello({"s", {"a", "b"}}), encode_ack(3, true, 1),
      encode_estimate(example(), panel(), 1, 1)};
  for (int k = 0; k < 20000; ++k) {
    std::string frame = seeds[bits() % seeds.size()];
    const int changes = 1 + static_cast<int>(bits() % 4);
    for (int c = 0; c < changes; ++c) {
      const std::size_t at = bits() % frame.size();
      switch (bits() % 3) {
        case 0:
          frame[at] = static_cast<char>(bits());
          break;
        case 1:
          frame.erase(at, 1 + bits() % 16);
          break;
        default:
          frame.insert(at, std::string(1 + bits() % 16, static_cast<char>(bits())));
          break;
      }
      if (frame.empty()) frame = "x";
    }
    for (const std::string& answer : desk.from_peer("x", frame)) EXPECT_TRUE(decode(answer).ok());
  }
  // A frame changed back into itself may count: nothing else does.
  EXPECT_LE(engine.counters().accepted, 2u);
  EXPECT_GT(desk.bad_frames(), 19000u);
}

TEST(IntakeDesk, AcknowledgesRepeatsAndRefusesGaps) {
  Engine engine(two_channels());
  std::size_t published = 0;
  IntakeDesk desk(engine, 1,
                  [&](const std::vector<Record>& records) { published += records.size(); });
  const auto samples = [](std::uint64_t from, std::uint64_t to) {
    std::vector<WireSample> list;
    for (std::uint64_t k = from; k <= to; ++k) {
      list.push_back({k, static_cast<std::int64_t>(k), {1. * static_cast<double>(k), 2}});
    }
    return encode_samples(list, 2, channels_hash({"a", "b"}), 0);
  };
  const auto kind = [](const std::string& frame) { return decode(frame).value().header.kind; };
  const auto sequence = [](const std::string& frame) {
    return decode(frame).value().header.sequence;
  };
  EXPECT_EQ(kind(desk.from_peer("x", samples(1, 3))[0]), Kind::refusal);  // no hello yet
  EXPECT_EQ(sequence(desk.from_peer("x", encode_hello({"s", {"a", "b"}}))[0]), 1u);
  EXPECT_EQ(sequence(desk.from_peer("x", samples(1, 3))[0]), 3u);
  EXPECT_EQ(published, 3u);
  EXPECT_EQ(sequence(desk.from_peer("x", samples(2, 5))[0]), 5u);
  EXPECT_EQ(published, 5u);  // 2 and 3 were known
  const std::vector<std::string> gap = desk.from_peer("x", samples(9, 9));
  ASSERT_EQ(gap.size(), 2u);
  EXPECT_EQ(decode_refusal(decode(gap[0]).value()).value().reason, "sequence_gap");
  EXPECT_EQ(sequence(gap[1]), 5u);
  EXPECT_EQ(sequence(desk.from_peer("y", encode_hello({"s", {"a", "b"}}))[0]), 6u);
}

TEST(IntakeDesk, CountsWhatAPlainFeedLoses) {
  Engine engine(two_channels());
  IntakeDesk desk(engine, 1, [](const std::vector<Record>&) {});
  const auto sample = [](std::uint64_t k) {
    return encode_samples({{k, static_cast<std::int64_t>(k), {1, 2}}}, 2, channels_hash({"a", "b"}),
                          0);
  };
  desk.from_plain_feed(0, sample(5));
  desk.from_plain_feed(0, sample(6));
  desk.from_plain_feed(0, sample(10));
  EXPECT_EQ(desk.lost(), 3u);
  EXPECT_EQ(engine.counters().accepted, 3u);
  EXPECT_NE(desk.take_complaint().find("3 samples"), std::string::npos);
}

TEST(IntakeDesk, RefusesValuesThatAreNotFinite) {
  Engine engine(two_channels());
  IntakeDesk desk(engine, 1, [](const std::vector<Record>&) {});
  desk.from_peer("x", encode_hello({"s", {"a", "b"}}));
  const double bad[3] = {std::nan(""), std::numeric_limits<double>::infinity(), 1e200};
  for (std::uint64_t k = 0; k < 3; ++k) {
    const auto answers = desk.from_peer(
        "x", encode_samples({{k + 1, 1, {bad[k], bad[k]}}}, 2, channels_hash({"a", "b"}), 0));
    ASSERT_EQ(answers.size(), 2u);
    EXPECT_EQ(decode_refusal(decode(answers[0]).value()).value().sequence, k + 1);
  }
  EXPECT_EQ(engine.counters().refused, 3u);
  EXPECT_EQ(engine.counters().accepted, 0u);
}

}  // namespace
}  // namespace tailweir

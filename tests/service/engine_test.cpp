// The engine: order of records, levels, refusals that leave no trace, acknowledged senders.
#include "service/engine/engine.h"

#include <gtest/gtest.h>

#include <cmath>
#include <limits>
#include <random>

#include "service/report/record_lines.h"

namespace tailweir {
namespace {

constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();
constexpr double kInfinity = std::numeric_limits<double>::infinity();

Settings settings() {
  Result<Settings> read = parse_settings(R"(channels:
  - {name: price, enters_as: level}
  - {name: rate, enters_as: change}
  - {name: spread, enters_as: level, step: difference, scale: 100}
panels:
  - name: all-of-it
    channels: all
    horizons: [{name: slow, window: 40}, {name: fast, half_life: 10}]
    flags: {rate: 0.05}
  - name: two
    channels: [spread, rate]
    horizons: [{name: only, window: 30}]
    flags: {rate: 0.05}
)",
                                         "engine");
  EXPECT_TRUE(read.ok()) << read.fault().line();
  return read.value();
}

// Sample i of an invented feed: seeded, heavy-tailed enough to raise flags.
std::vector<SampleEvent> feed(int count) {
  std::mt19937_64 random(23);
  const auto uniform = [&random] {
    return (static_cast<double>(random() >> 11) + 0.5) / 9007199254740992.;
  };
  const auto heavy = [&uniform] { return std::tan(2.2 * (uniform() - 0.5)); };
  std::vector<SampleEvent> samples;
  double price = 100;
  for (int i = 0; i < count; ++i) {
    SampleEvent sample;
    sample.time_ns = i * 1000;
    price *= std::exp(0.01 * heavy());
    sample.values = {price, heavy(), 3 + heavy()};
    samples.push_back(sample);
  }
  return samples;
}

std::string lines_of(const Engine& engine, const Actions& actions) {
  const RecordLines lines(engine.descriptions(), {MatricesPolicy::Kind::every, 1});
  std::string out;
  for (const Record& record : actions.records) lines.append(record, out);
  return out;
}

TEST(Engine, PublishesEstimatesThenFlagsOfEachPanelInOrder) {
  Engine engine(settings());
  Actions actions;
  std::uint64_t flags = 0, sequence = 0;
  for (const SampleEvent& sample : feed(200)) {
    engine.step(sample, actions);
    ASSERT_TRUE(actions.accepted);
    ASSERT_EQ(engine.sequence(), ++sequence);
    if (sequence == 1) {
      EXPECT_TRUE(actions.records.empty()) << "the first levels only set the base";
      continue;
    }
    // Rank of a record: panel, then estimates before flags, then horizon; strictly rising.
    int last_rank = -1, estimates = 0;
    for (const Record& record : actions.records) {
      const auto* estimate = std::get_if<EstimateRecord>(&record);
      const auto* flag = std::get_if<FlagRecord>(&record);
      ASSERT_EQ(estimate != nullptr ? estimate->sequence : flag->sequence, sequence);
      ASSERT_EQ(estimate != nullptr ? estimate->time_ns : flag->time_ns, sample.time_ns);
      const int rank = estimate != nullptr
                           ? static_cast<int>(100 * estimate->panel + estimate->horizon)
                           : static_cast<int>(100 * flag->panel + 50 + flag->horizon);
      EXPECT_GT(rank, last_rank);
      last_rank = rank;
      estimates += estimate != nullptr ? 1 : 0;
      flags += flag != nullptr ? 1U : 0U;
    }
    ASSERT_EQ(estimates, 3);
  }
  EXPECT_GT(flags, 0U);
}

TEST(Engine, TurnsLevelsIntoTheChangesThatPanelsSee) {
  // Brute force: a second engine is fed changes computed here; its panel settings are the same.
  Settings changes = settings();
  for (ChannelSettings& channel : changes.channels)
    channel = {channel.name, EntersAs::change, Step::difference, "", 1};
  Engine engine(settings()), expected(changes);
  Actions actions, want;
  const std::vector<SampleEvent> samples = feed(120);
  for (std::size_t i = 0; i < samples.size(); ++i) {
    engine.step(samples[i], actions);
    if (i == 0) continue;
    SampleEvent change = samples[i];
    change.values[0] = std::log(samples[i].values[0] / samples[i - 1].values[0]);
    change.values[2] = 100 * (samples[i].values[2] - samples[i - 1].values[2]);
    expected.step(change, want);
    ASSERT_EQ(actions.records.size(), want.records.size());
  }
  const EstimateRecord got = engine.latest(0, 0), wanted = expected.latest(0, 0);
  ASSERT_EQ(got.scatter.size(), 6U);
  for (std::size_t k = 0; k < 6; ++k) {
    EXPECT_NEAR(got.scatter[k], wanted.scatter[k], 1e-9 * std::abs(wanted.scatter[k]) + 1e-15);
  }
}

TEST(Engine, RelativeDifferenceDividesByTheLastLevel) {
  Settings relative = settings();
  relative.channels[0].step = Step::relative_difference;
  Engine engine(relative);
  Settings change = settings();
  for (ChannelSettings& channel : change.channels)
    channel = {channel.name, EntersAs::change, Step::difference, "", 1};
  Engine expected(change);
  Actions actions;
  const double prices[] = {100, 110, 99, 105, 120, 90, 100, 130, 80, 95, 101, 99, 140, 60, 77, 91};
  for (int i = 0; i < 16; ++i) {
    const double rate = std::sin(i), spread = std::cos(3 * i);
    engine.step({"", 0, i, {prices[i], rate, spread}}, actions);
    if (i == 0) continue;
    expected.step(
        {"", 0, i, {prices[i] / prices[i - 1] - 1, rate, 100 * (spread - std::cos(3 * i - 3))}},
        actions);
  }
  const EstimateRecord got = engine.latest(0, 0), wanted = expected.latest(0, 0);
  ASSERT_EQ(got.scatter.size(), wanted.scatter.size());
  ASSERT_FALSE(got.scatter.empty());
  EXPECT_NEAR(got.scatter[0], wanted.scatter[0], 1e-9 * wanted.scatter[0]);
}

struct BadSample {
  RefusalReason reason;
  std::vector<double> values;
  std::int64_t time_offset;
  const char* text;
};

TEST(Engine, RefusalsLeaveNoTraceInAnyRecord) {
  // Reference: an engine that never saw the bad samples gives the same lines to the byte.
  const BadSample bad[] = {
      {RefusalReason::wrong_count,
       {1, 2},
       0,
       "sample: has 2 values; one for each of the 3 channels"},
      {RefusalReason::wrong_count, {}, 0, "sample: has 0 values"},
      {RefusalReason::not_finite, {1, -kInfinity, 3}, 0, "rate: the value is infinite"},
      {RefusalReason::missing, {kNaN, kNaN, kNaN}, 0, "sample: every value is missing"},
      {RefusalReason::time_backwards, {1, 2, 3}, -5000, "time: "},
      {RefusalReason::not_positive, {0, 2, 3}, 0, "price: level 0 has no logarithm"},
      {RefusalReason::not_positive, {-4, 2, 3}, 0, "price: level -4 has no log"},
      {RefusalReason::out_of_range, {1, 1e151, 3}, 0, "rate: the value 1e+151 is out of range"},
      {RefusalReason::out_of_range, {1, 1e-151, 3}, 0, "rate: the value 1e-151 is out of range"},
      {RefusalReason::out_of_range, {1e-300, 2, 3}, 0, "price: the value 1e-300 is out of range"},
      {RefusalReason::out_of_range, {1, 2, 1e149}, 0, "spread: the change 1e+151 is out of range"},
  };
  Engine engine(settings()), untouched(settings());
  Actions actions, refused, want;
  std::uint64_t refusals = 0;
  std::vector<std::uint64_t> by_reason(9);
  for (const SampleEvent& sample : feed(90)) {
    for (const BadSample& one : bad) {
      if (engine.sequence() == 0) break;
      engine.step({"", 0, sample.time_ns + one.time_offset, one.values}, refused);
      EXPECT_FALSE(refused.accepted);
      EXPECT_TRUE(refused.records.empty());
      EXPECT_EQ(refused.refusal.reason, one.reason) << one.text;
      EXPECT_EQ(refused.refusal.fault.line().substr(0, std::string(one.text).size()), one.text);
      ++refusals;
      ++by_reason[static_cast<std::size_t>(one.reason)];
    }
    engine.step(sample, actions);
    untouched.step(sample, want);
    ASSERT_EQ(lines_of(engine, actions), lines_of(untouched, want));
  }
  EXPECT_EQ(engine.sequence(), untouched.sequence());
  EXPECT_EQ(engine.last_time_ns(), untouched.last_time_ns());
  EXPECT_EQ(engine.counters().accepted, 90U);
  EXPECT_EQ(engine.counters().refused, refusals);
  EXPECT_EQ(engine.counters().refused_by_reason, by_reason);
}

TEST(Engine, AFirstSampleThatIsRefusedSetsNoBase) {
  Engine engine(settings()), untouched(settings());
  Actions actions, want;
  engine.step({"", 0, 0, {50, 1, -kInfinity}}, actions);
  EXPECT_EQ(engine.last_time_ns(), 0);
  EXPECT_EQ(engine.sequence(), 0U);
  for (const SampleEvent& sample : feed(60)) {
    engine.step(sample, actions);
    untouched.step(sample, want);
    ASSERT_EQ(lines_of(engine, actions), lines_of(untouched, want));
  }
}

TEST(Engine, AcknowledgesDuplicatesAgainAndSendsGapsBack) {
  Engine engine(settings()), plain(settings());
  Actions actions, want;
  std::uint64_t next = 1;
  for (SampleEvent sample : feed(60)) {
    plain.step(sample, want);
    sample.sender = "desk-1";
    EXPECT_EQ(engine.next_of("desk-1"), next);
    sample.sender_sequence = next + 2;
    engine.step(sample, actions);
    EXPECT_EQ(actions.refusal.reason, RefusalReason::sequence_gap);
    EXPECT_EQ(actions.refusal.fault.line(), "sender desk-1: sample " + std::to_string(next + 2) +
                                                " came before " + std::to_string(next) +
                                                "; samples from " + std::to_string(next) + " on");
    sample.sender_sequence = next;
    engine.step(sample, actions);
    ASSERT_TRUE(actions.accepted && !actions.duplicate);
    ASSERT_EQ(lines_of(engine, actions), lines_of(plain, want));
    engine.step(sample, actions);
    ASSERT_TRUE(actions.accepted && actions.duplicate && actions.records.empty());
    ++next;
  }
  EXPECT_EQ(engine.counters().duplicates, 60U);
  EXPECT_EQ(engine.next_of("desk-2"), 1U) << "senders count apart";
  EXPECT_EQ(engine.sequence(), 60U);
}

TEST(Engine, TakesMissingValuesAndSaysWhatWasObserved) {
  Engine engine(settings());
  Actions actions;
  for (int t = 0; t < 120; ++t) {
    std::vector<double> values = {100 + std::sin(t * 1.3), std::cos(t * 2.1), std::sin(t * t * .7)};
    if (t % 5 == 4) values[1] = kNaN;
    engine.step({"", 0, t, values}, actions);
    ASSERT_TRUE(actions.accepted) << actions.refusal.fault.line();
  }
  bool seen = false;
  for (const Record& record : actions.records) {
    const auto* estimate = std::get_if<EstimateRecord>(&record);
    if (estimate == nullptr || estimate->channel_coverage.empty()) continue;
    seen = true;
    EXPECT_LT(estimate->estimate.coverage, 1);
    double sum = 0;
    for (const double share : estimate->channel_coverage) sum += share;
    EXPECT_NEAR(sum / static_cast<double>(estimate->channel_coverage.size()),
                estimate->estimate.coverage, 1e-12);
  }
  EXPECT_TRUE(seen);
}

TEST(Engine, ARefusedSampleUsesUpItsSequenceSoThatTheSenderCanGoOn) {
  Engine engine(settings());
  Actions actions;
  engine.step({"a", 1, 0, {kNaN, kNaN, kNaN}}, actions);
  EXPECT_EQ(actions.refusal.reason, RefusalReason::missing);
  EXPECT_EQ(engine.next_of("a"), 2U);
  EXPECT_EQ(engine.sequence(), 0U);
  engine.step({"a", 2, 0, {1, 1, 1}}, actions);
  EXPECT_TRUE(actions.accepted && !actions.duplicate);
  EXPECT_EQ(engine.sequence(), 1U);
}

TEST(Engine, MatricesCanBeLeftOutAndAskedFor) {
  Engine engine(settings()), whole(settings());
  engine.set_matrices({MatricesPolicy::Kind::never, 1});
  Actions actions, want;
  for (const SampleEvent& sample : feed(80)) {
    engine.step(sample, actions);
    whole.step(sample, want);
  }
  const auto& lean = std::get<EstimateRecord>(actions.records[0]);
  const auto& full = std::get<EstimateRecord>(want.records[0]);
  EXPECT_TRUE(lean.scatter.empty() && lean.centre.empty());
  ASSERT_EQ(full.scatter.size(), 6U);
  EXPECT_EQ(lean.estimate.nu, full.estimate.nu);
  EXPECT_EQ(engine.latest(0, 0).scatter, full.scatter);
  EXPECT_EQ(engine.latest(0, 0).sequence, 80U);
}

TEST(Engine, CountsFlagsAgainstTheNominalRate) {
  Engine engine(settings());
  Actions actions;
  std::uint64_t flags = 0;
  double scored = 0, expected = -1;
  for (const SampleEvent& sample : feed(300)) {
    engine.step(sample, actions);
    for (const Record& record : actions.records) {
      if (const auto* estimate = std::get_if<EstimateRecord>(&record)) {
        if (estimate->panel == 1 && !std::isnan(estimate->estimate.p_value)) ++scored;
      } else if (std::get<FlagRecord>(record).panel == 1) {
        EXPECT_EQ(std::get<FlagRecord>(record).flagged, ++flags);
        expected = std::get<FlagRecord>(record).flagged_expected;
        EXPECT_DOUBLE_EQ(expected, 0.05 * scored);
      }
    }
  }
  EXPECT_GT(flags, 0U);
}

}  // namespace
}  // namespace tailweir

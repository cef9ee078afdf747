// The CSV recording reader: what it accepts, and the one line it says about everything else.
#include "service/intake/recording.h"

#include <gtest/gtest.h>

#include <cmath>
#include <cstdio>
#include <limits>
#include <random>

#include "service/intake/time_text.h"

namespace tailweir {
namespace {

struct Read {
  std::vector<std::string> channels;
  std::vector<RecordedSample> samples;
  std::string fault;  // one line, empty when the end was reached
};

Read read_all(const std::string& text) {
  Read out;
  Result<RecordingReader> reader = RecordingReader::from_text(text, "r.csv");
  if (!reader) {
    out.fault = reader.fault().line();
    return out;
  }
  out.channels = reader.value().channels();
  for (;;) {
    Result<std::optional<RecordedSample>> sample = reader.value().next();
    if (!sample) {
      out.fault = sample.fault().line();
      return out;
    }
    if (!sample.value()) return out;
    out.samples.push_back(*sample.value());
  }
}

TEST(Recording, ReadsTimesValuesAndMissingCells) {
  const Read read = read_all(
      "time,a,b-2\n2026-03-01T09:30:00.25Z,1.5,-2e-3\n2026-03-01T12:30:01+03:00,,nan\n"
      "2026-03-02,NA,+7\n1772442000000000001,NaN, 4 \n");
  EXPECT_EQ(read.fault, "");
  EXPECT_EQ(read.channels, (std::vector<std::string>{"a", "b-2"}));
  ASSERT_EQ(read.samples.size(), 4U);
  EXPECT_EQ(format_time(read.samples[0].time_ns), "2026-03-01T09:30:00.250000000Z");
  EXPECT_EQ(read.samples[0].values, (std::vector<double>{1.5, -2e-3}));
  EXPECT_EQ(format_time(read.samples[1].time_ns), "2026-03-01T09:30:01.000000000Z");
  EXPECT_TRUE(std::isnan(read.samples[1].values[0]) && std::isnan(read.samples[1].values[1]));
  EXPECT_EQ(format_time(read.samples[2].time_ns), "2026-03-02T00:00:00.000000000Z");
  EXPECT_TRUE(std::isnan(read.samples[2].values[0]));
  EXPECT_EQ(read.samples[2].values[1], 7);
  EXPECT_EQ(read.samples[3].time_ns, 1772442000000000001);
  EXPECT_EQ(read.samples[3].values[1], 4);
  EXPECT_EQ(read.samples[3].line, 5U);
}

TEST(Recording, AcceptsByteOrderMarkCarriageReturnsQuotesAndTrailingEmptyLines) {
  const Read read =
      read_all("\xef\xbb\xbf\"time\",\"a\",b\r\n\"1\",\"2\",\"3\"\r\n2,3,\"4\"\r\n\r\n\r\n");
  EXPECT_EQ(read.fault, "");
  ASSERT_EQ(read.samples.size(), 2U);
  EXPECT_EQ(read.samples[1].values, (std::vector<double>{3, 4}));
  EXPECT_EQ(read.samples[1].line, 3U);
}

TEST(Recording, NeedsNoLineFeedAfterTheLastRow) {
  const Read read = read_all("time,a\n1,2\n1,3");
  EXPECT_EQ(read.fault, "");
  ASSERT_EQ(read.samples.size(), 2U) << "equal times are in order";
  EXPECT_EQ(read.samples[1].values[0], 3);
}

TEST(Recording, SaysOneLineAboutEveryBadFile) {
  const struct {
    const char* text;
    const char* fault;
  } cases[] = {
      {"", "r.csv:1: is empty"},
      {"\n", "r.csv:1: the first column is \"\", not time"},
      {"date,a\n", "r.csv:1: the first column is \"date\", not time"},
      {"time\n", "r.csv:1: names no channel"},
      {"time,channel,value\n", "r.csv:1: is a recording of ticks"},
      {"time,a,a\n", "r.csv:1: column 3: channel \"a\" stands twice"},
      {"time,DAX\n",
       "r.csv:1: column 2: \"DAX\" is no channel name; use 1 to 31 of a-z 0-9 _ . -, "
       "such as \"dax\""},
      {"time,\n", "r.csv:1: column 2: \"\" is no channel name"},
      {"time,a b\n", "r.csv:1: column 2: \"a b\" is no channel name"},
      {"time,abcdefghijklmnopqrstuvwxyz0123456789\n", "r.csv:1: column 2: "},
      {"time,\xc3\xa4\n", "r.csv:1: column 2: \"\\xc3\\xa4\" is no channel name"},
      {"\xff\xfet\n", "r.csv:1: is UTF-16 text; save it as UTF-8"},
      {"time,a\n1\n", "r.csv:2: has 1 cells; the header names 2"},
      {"time,a\n1,2,3\n", "r.csv:2: has 3 cells; the header names 2"},
      {"time,a\n1,2,\n", "r.csv:2: has 3 cells"},
      {"time,a\n1,2\n\n2,3\n", "r.csv:3: is an empty line between samples"},
      {"time,a\n1,two\n", "r.csv:2: column a: \"two\" is not a number"},
      {"time,a\n1,1.5x\n", "r.csv:2: column a: \"1.5x\" is not a number"},
      {"time,a\n1,\"1,5\"\n", "r.csv:2: column a: \"1,5\" is not a number"},
      {"time,a\n1,+-5\n", "r.csv:2: column a: \"+-5\" is not a number"},
      {"time,a\n1,0x1p3\n", "r.csv:2: column a: \"0x1p3\" is not a number"},
      {"time,a\n1,nan(7)\n", "r.csv:2: column a: \"nan(7)\" is not a number"},
      {"time,a\n1,-inf\n", "r.csv:2: column a: \"-inf\" is infinite"},
      {"time,a\n1,Infinity\n", "r.csv:2: column a: \"Infinity\" is infinite"},
      {"time,a\n1,1e999\n", "r.csv:2: column a: \"1e999\" is outside the range of a double"},
      {"time,a\n1,1e-999\n", "r.csv:2: column a: \"1e-999\" is outside the range of a double"},
      {"time,a\n2,1\n1,1\n", "r.csv:3: time 1 goes back, the row before has 1970-01-01T00:00:00."},
      {"time,a\n,1\n", "r.csv:2: time \"\" is not a time"},
      {"time,a\nyesterday morning,1\n", "r.csv:2: time \"yesterday morning\" is not a time"},
      {"time,a\n2026-02-30,1\n", "r.csv:2: time \"2026-02-30\" is a date that does not exist"},
      {"time,a\n2026-03-01T25:00:00Z,1\n",
       "r.csv:2: time \"2026-03-01T25:00:00Z\" is a time of day"},
      {"time,a\n2026-03-01T09:00:00,1\n", "r.csv:2: time \"2026-03-01T09:00:00\" has no time zone"},
      {"time,a\n2026-03-01T09:00:00+2,1\n",
       "r.csv:2: time \"2026-03-01T09:00:00+2\" has a time zone"},
      {"time,a\n2026-03-01T09:00:00.Z,1\n",
       "r.csv:2: time \"2026-03-01T09:00:00.Z\" has no digits"},
      {"time,a\n2026-03-01T09:00:00.0000000001Z,1\n",
       "r.csv:2: time \"2026-03-01T09:00:00.0000000001Z\" is finer than a nanosecond"},
      {"time,a\n1500-01-01,1\n", "r.csv:2: time \"1500-01-01\" lies outside the years"},
      {"time,a\n99999999999999999999,1\n",
       "r.csv:2: time \"99999999999999999999\" is more nanoseconds than 64 bits hold"},
      {"time,a\n1,\"2\n2,3\n", "r.csv:2: opens a quoted cell that never closes"},
      {"time,a\n1,2\"\n", "r.csv:2: has a quote inside a cell"},
      {"time,a\n1,\"2\"3\n", "r.csv:2: has characters behind a closing quote"},
  };
  for (const auto& bad : cases) {
    const Read read = read_all(bad.text);
    EXPECT_EQ(read.fault.substr(0, std::string(bad.fault).size()), bad.fault) << bad.text;
    EXPECT_EQ(read.fault.find('\n'), read.fault.npos) << "one line";
  }
}

TEST(Recording, GoesOnAfterABadRowAndStaysAtABrokenQuote) {
  Result<RecordingReader> reader =
      RecordingReader::from_text("time,a\n1,x\n1\n9,2\n3,4\n9,5\n9,\"6\n", "r.csv");
  ASSERT_TRUE(reader.ok());
  RecordingReader& rows = reader.value();
  EXPECT_FALSE(rows.next().ok()) << "a word";
  EXPECT_FALSE(rows.next().ok()) << "a ragged row";
  EXPECT_EQ(rows.next().value()->values[0], 2);
  EXPECT_FALSE(rows.next().ok()) << "time back";
  EXPECT_EQ(rows.next().value()->line, 6U);
  for (int i = 0; i < 3; ++i) {
    EXPECT_EQ(rows.next().fault().line().substr(0, 27), "r.csv:7: opens a quoted cel");
  }
  EXPECT_FALSE(rows.unreadable());
}

TEST(Recording, CountsLinesThroughQuotedLineFeeds) {
  const Read read = read_all("time,\"a\n\",b\n");
  EXPECT_EQ(read.fault.substr(0, 8), "r.csv:1:");
  const Read later = read_all("time,a\n\"1\",5\n1,\"\n\n5\"\n2,x\n");
  EXPECT_EQ(later.fault.substr(0, 8), "r.csv:3:") << later.fault;
}

TEST(Recording, StreamsAFileLargerThanItsBufferAsFromMemory) {
  // Reference: the same text read from memory in one piece. Deterministic (seed 3).
  std::mt19937_64 random(3);
  std::string text = "time,a,b\n";
  for (int i = 0; i < 60000; ++i) {
    text += std::to_string(i) + "," + std::to_string(random() % 1000000) + ",\"0." +
            std::to_string(random() % 1000000) + "\"\n";
  }
  const std::string path = testing::TempDir() + "tailweir_recording.csv";
  std::FILE* file = std::fopen(path.c_str(), "wb");
  ASSERT_NE(file, nullptr);
  ASSERT_EQ(std::fwrite(text.data(), 1, text.size(), file), text.size());
  ASSERT_EQ(std::fclose(file), 0);
  const Read expected = read_all(text);
  Result<RecordingReader> reader = RecordingReader::open(path);
  ASSERT_TRUE(reader.ok());
  RecordingReader moved = std::move(reader.value());
  EXPECT_EQ(moved.size(), text.size());
  for (const RecordedSample& want : expected.samples) {
    Result<std::optional<RecordedSample>> got = moved.next();
    ASSERT_TRUE(got.ok() && got.value());
    ASSERT_EQ(got.value()->values, want.values);
    ASSERT_EQ(got.value()->time_ns, want.time_ns);
    ASSERT_EQ(got.value()->line, want.line);
  }
  ASSERT_FALSE(moved.next().value().has_value());
  EXPECT_EQ(moved.position(), text.size());
  std::remove(path.c_str());
}

TEST(Recording, TellsAnUnreadableFileFromAWrongOne) {
  bool unreadable = false;
  const Result<RecordingReader> none = RecordingReader::open("/nonexistent/r.csv", &unreadable);
  ASSERT_FALSE(none.ok());
  EXPECT_TRUE(unreadable);
  EXPECT_NE(none.fault().line().find("No such file"), std::string::npos);
  const Result<RecordingReader> folder = RecordingReader::open("/", &unreadable);
  ASSERT_FALSE(folder.ok());
  EXPECT_TRUE(unreadable) << folder.fault().line();
}

TEST(Recording, SurvivesMutatedText) {
  // Brute force: 5 000 deterministic byte mutations (seed 11) never crash or loop.
  const std::string good =
      "time,a,\"b\"\r\n2026-03-01T09:30:00.25Z,1.5,\"-2e-3\"\r\n2026-03-02,NA,\r\n";
  const std::string bytes("\",\n\r\0 -+.eE0129TZ:naNAif\xff\xef", 26);
  std::mt19937_64 random(11);
  for (int i = 0; i < 5000; ++i) {
    std::string text = good;
    for (std::uint64_t k = random() % 4 + 1; k > 0; --k) {
      const std::size_t at = random() % text.size();
      const char byte = bytes[random() % bytes.size()];
      if (random() % 3 == 0) {
        text.insert(at, 1, byte);
      } else if (random() % 2 == 0) {
        text.erase(at, 1);
      } else {
        text[at] = byte;
      }
    }
    const Read read = read_all(text);
    for (const RecordedSample& sample : read.samples) {
      ASSERT_EQ(sample.values.size(), read.channels.size());
    }
  }
}

TEST(TimeText, RoundTripsEveryKindOfTime) {
  // Identity parse(format(t)) = t over 1690 to 2250, seed 5; then cited equalities of RFC 3339.
  std::mt19937_64 random(5);
  for (int i = 0; i < 20000; ++i) {
    const std::int64_t time =
        static_cast<std::int64_t>(random() % 8'800'000'000'000'000'000ULL) * (i % 2 == 0 ? 1 : -1);
    const Result<std::int64_t> back = read_time(format_time(time));
    ASSERT_TRUE(back.ok()) << format_time(time);
    ASSERT_EQ(back.value(), time);
  }
  EXPECT_EQ(format_time(-1), "1969-12-31T23:59:59.999999999Z");
  EXPECT_EQ(read_time("2016-12-31T23:59:60Z").value(), read_time("2017-01-01").value());
  EXPECT_EQ(read_time("1990-12-31T15:59:60-08:00").value(), read_time("1991-01-01").value());
}

}  // namespace
}  // namespace tailweir

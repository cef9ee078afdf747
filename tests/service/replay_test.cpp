// check and replay as a user meets them: the real program, its files, its exit codes.
#include <gtest/gtest.h>
#include <sys/wait.h>
#include <unistd.h>

#include <cstdio>
#include <filesystem>
#include <fstream>
#include <nlohmann/json.hpp>
#include <sstream>

namespace tailweir {
namespace {

namespace fs = std::filesystem;

struct Outcome {
  int code = -1;
  std::string output;  // standard output and error, as they came
};

Outcome run(const std::string& arguments) {
  Outcome outcome;
  std::FILE* pipe = popen((std::string(TAILWEIR_PROGRAM) + " " + arguments + " 2>&1").c_str(), "r");
  if (pipe == nullptr) return outcome;
  char piece[4096];
  for (std::size_t got = 0; (got = std::fread(piece, 1, sizeof piece, pipe)) > 0;) {
    outcome.output.append(piece, got);
  }
  const int status = pclose(pipe);
  if (WIFEXITED(status)) outcome.code = WEXITSTATUS(status);
  return outcome;
}

std::string contents(const fs::path& path) {
  std::ifstream file(path, std::ios::binary);
  std::ostringstream text;
  text << file.rdbuf();
  return text.str();
}

// A folder of its own for each test, with settings and a recording in it.
class ReplayProgram : public testing::Test {
 protected:
  void SetUp() override {
    folder_ =
        fs::path(testing::TempDir()) /
        ("tailweir_" + std::string(testing::UnitTest::GetInstance()->current_test_info()->name()) +
         "_" + std::to_string(getpid()));
    fs::create_directories(folder_);
    write("s.yaml", kSettings);
    std::string rows = "time,ignored,b,a\n";
    for (int i = 0; i < 200; ++i) {
      const int spike = i == 150 ? 4000 : 0;
      rows += std::to_string(i) + "," + std::to_string(i % 3) + "," +
              std::to_string((i * 37 + i * i) % 101 - 50 + spike) + "," +
              std::to_string((i * 53 + 7 * i * i) % 97 - 48) + "\n";
    }
    write("r.csv", rows);
  }
  void TearDown() override { fs::remove_all(folder_); }

  void write(const std::string& name, const std::string& text) {
    std::ofstream(folder_ / name, std::ios::binary) << text;
  }
  std::string at(const std::string& name) const { return (folder_ / name).string(); }
  Outcome replay(const std::string& more, const std::string& from = "r.csv") {
    return run("replay " + at("s.yaml") + " --from " + at(from) + " --into " + at("out") + " " +
               more);
  }
  std::vector<nlohmann::json> estimates() const {
    std::vector<nlohmann::json> read;
    std::istringstream lines(contents(folder_ / "out" / "estimates.jsonl"));
    for (std::string line; std::getline(lines, line);) read.push_back(nlohmann::json::parse(line));
    return read;
  }

  static constexpr const char* kSettings =
      "channels: [{name: a}, {name: b}]\n"
      "panels:\n"
      "  - name: p\n    channels: all\n"
      "    horizons: [{name: w, window: 60}, {name: e, half_life: 20}]\n";
  fs::path folder_;
};

TEST_F(ReplayProgram, WritesEstimatesFlagsAndAReport) {
  const Outcome outcome = replay("");
  EXPECT_EQ(outcome.code, 0) << outcome.output;
  const std::vector<nlohmann::json> records = estimates();
  ASSERT_EQ(records.size(), 400U);
  EXPECT_EQ(records[0]["horizon"], "w");
  EXPECT_EQ(records[399]["horizon"], "e");
  EXPECT_EQ(records[399]["sequence"], 200);
  EXPECT_TRUE(records[397]["scatter"].is_null());
  const std::string last = contents(folder_ / "out" / "last.jsonl");
  EXPECT_EQ(nlohmann::json::parse(last.substr(0, last.find('\n')))["scatter"].size(), 3U);
  const std::string flags = contents(folder_ / "out" / "flags.jsonl");
  const nlohmann::json flag = nlohmann::json::parse(flags.substr(0, flags.find('\n')));
  EXPECT_EQ(flag["sequence"], 151);
  EXPECT_EQ(flag["channels"][0]["name"], "b");
  const std::string report = contents(folder_ / "out" / "report.txt");
  EXPECT_EQ(outcome.output,
            "200 samples replayed, 0 refused; records and report.txt in " + at("out") + "\n");
  EXPECT_NE(report.find("samples    200 accepted, 0 refused\n"), report.npos);
  EXPECT_NE(report.find("unused     column ignored\n"), report.npos);
  EXPECT_NE(report.find("largest flags\n  1970-01-01T00:00:00.000000150Z  sample 151  panel p"),
            report.npos)
      << report;
}

TEST_F(ReplayProgram, GivesTheSameBytesTwiceAndMatricesOnDemand) {
  ASSERT_EQ(replay("--matrices every").code, 0);
  const std::string once = contents(folder_ / "out" / "estimates.jsonl");
  ASSERT_EQ(replay("--matrices every --overwrite").code, 0);
  EXPECT_EQ(contents(folder_ / "out" / "estimates.jsonl"), once);
  EXPECT_EQ(estimates()[300]["scatter"].size(), 3U);
  ASSERT_EQ(replay("--matrices 50 --overwrite").code, 0);
  EXPECT_TRUE(estimates()[296]["scatter"].is_null());
  EXPECT_EQ(estimates()[298]["scatter"].size(), 3U) << "sequence 150";
  ASSERT_EQ(replay("--matrices never --overwrite").code, 0);
  EXPECT_TRUE(estimates()[399]["scatter"].is_null());
}

TEST_F(ReplayProgram, NeverOverwritesUnlessToldTo) {
  ASSERT_EQ(replay("").code, 0);
  const Outcome again = replay("");
  EXPECT_EQ(again.code, 74);
  EXPECT_EQ(again.output,
            "tailweir: " + at("out") + ": is not empty; name another folder, or add --overwrite\n");
  write("file", "");
  const Outcome file =
      run("replay " + at("s.yaml") + " --from " + at("r.csv") + " --into " + at("file"));
  EXPECT_EQ(file.code, 74) << file.output;
}

TEST_F(ReplayProgram, EndsAtTheFirstRefusedSampleOrCountsThem) {
  write("bad.csv", "time,a,b\n1,1,2\n2,,NA\n3,1,2\n4,1e200,2\n5,2,1\n");
  const Outcome ended = replay("", "bad.csv");
  EXPECT_EQ(ended.code, 65);
  EXPECT_EQ(ended.output, "tailweir: " + at("bad.csv") +
                              ":3: sample: every value is missing; at least one finite number "
                              "(or add --keep-going)\n");
  EXPECT_EQ(estimates().size(), 2U) << "what came before stays";
  const Outcome counted = replay("--keep-going --overwrite", "bad.csv");
  EXPECT_EQ(counted.code, 0);
  EXPECT_NE(contents(folder_ / "out" / "report.txt")
                .find("samples    3 accepted, 2 refused\n"
                      "           1 refused: missing\n"
                      "           1 refused: out_of_range\n"),
            std::string::npos)
      << counted.output;
  EXPECT_EQ(estimates().size(), 6U);
}

TEST_F(ReplayProgram, SaysOneLineAndTheRightCodeForEveryBadInput) {
  write("bad.yaml", "channels: [{name: a}]\npanels: 3\n");
  write("ragged.csv", "time,a,b\n1,1\n");
  write("short.csv", "time,a\n1,1\n");
  const auto with = [this](const std::string& settings, const std::string& from) {
    return run("replay " + at(settings) + " --from " + at(from) + " --into " + at("out2"));
  };
  Outcome outcome = with("bad.yaml", "r.csv");
  EXPECT_EQ(outcome.code, 78);
  EXPECT_EQ(outcome.output,
            "tailweir: " + at("bad.yaml") + ":2:9: panels is \"3\"; write a list\n");
  outcome = with("s.yaml", "none.csv");
  EXPECT_EQ(outcome.code, 74);
  outcome = with("s.yaml", "ragged.csv");
  EXPECT_EQ(outcome.code, 65);
  EXPECT_EQ(outcome.output,
            "tailweir: " + at("ragged.csv") + ":2: has 2 cells; the header names 3\n");
  outcome = with("s.yaml", "short.csv");
  EXPECT_EQ(outcome.code, 65);
  EXPECT_EQ(outcome.output, "tailweir: " + at("short.csv") +
                                ":1: has no column b; the settings name it as a channel\n");
  EXPECT_EQ(replay("--matrices sometimes").code, 64);
  EXPECT_EQ(run("replay " + at("s.yaml")).code, 64);
  EXPECT_EQ(run("no-such-command").code, 64);
  EXPECT_EQ(run("replay --help").code, 0);
}

TEST_F(ReplayProgram, ReadsStandardInput) {
  const Outcome outcome =
      run("replay " + at("s.yaml") + " --from - --into " + at("out") + " < " + at("r.csv"));
  EXPECT_EQ(outcome.code, 0) << outcome.output;
  EXPECT_EQ(estimates().size(), 400U);
}

TEST_F(ReplayProgram, SaysWhenTheDiskIsFull) {
  fs::create_directories(folder_ / "out");
  fs::create_symlink("/dev/full", folder_ / "out" / "estimates.jsonl");
  const Outcome outcome = replay("--overwrite");
  EXPECT_EQ(outcome.code, 74);
  EXPECT_NE(outcome.output.find("cannot be written: No space left on device"), std::string::npos)
      << outcome.output;
}

TEST_F(ReplayProgram, CheckPrintsThePlanOrThePlaceOfTheFault) {
  const Outcome good = run("check " + at("s.yaml"));
  EXPECT_EQ(good.code, 0);
  EXPECT_NE(good.output.find("horizon e: half-life 20 samples, as good as 58 equal ones"),
            std::string::npos)
      << good.output;
  write("bad.yaml", std::string(kSettings) + "spare: 1\n");
  const Outcome bad = run("check " + at("bad.yaml"));
  EXPECT_EQ(bad.code, 78);
  EXPECT_EQ(bad.output.substr(0, at("bad.yaml").size() + 40),
            "tailweir: " + at("bad.yaml") + ":6:1: unknown key \"spare\" in t");
  EXPECT_EQ(run("check " + at("missing.yaml")).code, 78);
}

}  // namespace
}  // namespace tailweir

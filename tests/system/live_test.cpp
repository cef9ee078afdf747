// The real program end to end: send -> run -> tap over sockets, against replay and against R.

#include <gtest/gtest.h>
#include <signal.h>

#include <chrono>
#include <cstdio>
#include <nlohmann/json.hpp>
#include <sstream>

#include "tests/oracles/r_data.h"
#include "tests/system/process.h"

namespace tailweir {
namespace {

using system_test::Folder;
using system_test::Process;
using system_test::run;
using system_test::wait_for_text;

// EuStockMarkets returns as a recording, one row a second, every digit kept.
std::string eu_recording(int rows) {
  const Eigen::MatrixXd x = oracles::r_samples(oracles::kEuStockReturns);
  std::string text = "time,dax,smi,cac,ftse\n";
  char number[40];
  for (Eigen::Index t = 0; t < std::min<Eigen::Index>(rows, x.cols()); ++t) {
    text += std::to_string((t + 1) * 1000000000);
    for (int j = 0; j < 4; ++j) {
      std::snprintf(number, sizeof number, ",%.17g", x(j, t));
      text += number;
    }
    text += "\n";
  }
  return text;
}

// Two panels, three horizons.
std::string eu_settings(const Folder& folder) {
  return "feed: {listen: \"ipc://" + folder.path("in") + "\"}\n" + "publish: {address: \"ipc://" +
         folder.path("out.sock") + "\"}\n" +
         "channels: [dax, smi, cac, ftse]\n"
         "panels:\n"
         "  - name: indices\n"
         "    channels: all\n"
         "    centre: estimated\n"
         "    degrees_of_freedom: 4\n"
         "    horizons:\n"
         "      - {name: window, window: 250, tolerance: 1e-10}\n"
         "      - {name: decay, half_life: 100, tolerance: 1e-10}\n"
         "  - name: pair\n"
         "    channels: [cac, dax]\n"
         "    horizons:\n"
         "      - {name: short, window: 120}\n";
}

std::vector<std::string> lines_of(const std::string& text, bool flags) {
  std::vector<std::string> lines;
  std::istringstream in(text);
  for (std::string line; std::getline(in, line);) {
    if ((line.find("\"severity\"") != std::string::npos) == flags) lines.push_back(line);
  }
  return lines;
}

// Oracle for the figures: MASS::cov.trob (R), nu = 4. For the lines: the same recording through
// replay, byte for byte.
TEST(Live, MatchesReplayToTheByteAndR) {
  const Folder folder;
  folder.write("eu.csv", eu_recording(1859));
  folder.write("eu.yaml", eu_settings(folder));
  std::string out, err;
  ASSERT_EQ(run({"replay", folder.path("eu.yaml"), "--from", folder.path("eu.csv"), "--into",
                 folder.path("replay"), "--matrices", "every"},
                out, err),
            0)
      << err;
  const std::string estimates = system_test::read_file(folder.path("replay/estimates.jsonl"));
  const std::string flags = system_test::read_file(folder.path("replay/flags.jsonl"));
  const std::vector<std::string> replayed = lines_of(estimates, false);
  const std::vector<std::string> replayed_flags = lines_of(flags, true);
  ASSERT_EQ(replayed.size(), 3u * 1859u);

  Process daemon({"run", folder.path("eu.yaml")}, folder.path("run.out"), folder.path("run.err"));
  ASSERT_TRUE(wait_for_text(folder.path("run.err"), "publishing at", 10));
  Process tap({"tap", "ipc://" + folder.path("out.sock"), "--json", "--count",
               std::to_string(replayed.size() + replayed_flags.size()), "--patience", "20"},
              folder.path("tap.out"), folder.path("tap.err"));
  ASSERT_TRUE(wait_for_text(folder.path("tap.err"), "connected", 10));
  ASSERT_EQ(run({"send", "ipc://" + folder.path("in"), "--from", folder.path("eu.csv")}, out, err),
            0)
      << err;
  EXPECT_NE(out.find("1859 samples acknowledged"), std::string::npos) << out;
  ASSERT_EQ(tap.wait(60), 0) << folder.read("tap.err");
  const std::string live = folder.read("tap.out");
  EXPECT_EQ(lines_of(live, false), replayed);
  EXPECT_EQ(lines_of(live, true), replayed_flags);

  daemon.signal(SIGTERM);
  EXPECT_EQ(daemon.wait(1), 0);

  // Figures in the live lines: S11 of the sliding window and of the half-life, a distance's
  // p-value.
  for (const std::string& line : lines_of(live, false)) {
    const nlohmann::json record = nlohmann::json::parse(line);
    const auto sequence = record["sequence"].get<int>();
    const std::string horizon = record["horizon"];
    if (horizon == "window" && sequence == 600) {
      EXPECT_NEAR(record["scatter"][0].get<double>() / .4155889673, 1, 1e-8);
    }
    if (horizon == "window" && sequence == 1859) {
      EXPECT_NEAR(record["scatter"][0].get<double>() / 1.456898938, 1, 1e-8);
    }
    if (horizon == "decay" && sequence == 1859) {
      EXPECT_NEAR(record["scatter"][0].get<double>() / 1.239301027, 1, 1e-8);
      EXPECT_NEAR(record["centre"][0].get<double>() / .1664207936, 1, 1e-8);
    }
  }
}

TEST(Live, StopsWithinASecondWhileSamplesArrive) {
  for (const int signal : {SIGTERM, SIGINT}) {
    const Folder folder;
    folder.write("eu.yaml", eu_settings(folder));
    Process daemon({"run", folder.path("eu.yaml")}, folder.path("run.out"), folder.path("run.err"));
    ASSERT_TRUE(wait_for_text(folder.path("run.err"), "publishing at", 10));
    folder.write("eu.csv", eu_recording(1859));
    Process send(
        {"send", "ipc://" + folder.path("in"), "--from", folder.path("eu.csv"), "--every", "1ms"},
        folder.path("send.out"), folder.path("send.err"));
    Process tap({"tap", "ipc://" + folder.path("out.sock"), "--count", "50", "--patience", "20"},
                folder.path("tap.out"), folder.path("tap.err"));
    ASSERT_EQ(tap.wait(20), 0) << folder.read("tap.err");
    const auto begin = std::chrono::steady_clock::now();
    daemon.signal(signal);
    EXPECT_EQ(daemon.wait(3), 0);
    EXPECT_LT(std::chrono::steady_clock::now() - begin, std::chrono::seconds(1));
    EXPECT_NE(folder.read("run.err").find("stopped after"), std::string::npos);
  }
}

TEST(Live, SaysThatAnAddressIsTaken) {
  const Folder folder;
  folder.write("a.yaml",
               "feed: {listen: \"tcp://127.0.0.1:*\"}\nchannels: [a, b]\n"
               "panels:\n  - {name: p, channels: all, horizons: [{name: h, window: 20}]}\n");
  Process first({"run", folder.path("a.yaml")}, folder.path("out"), folder.path("err"));
  ASSERT_TRUE(wait_for_text(folder.path("err"), "listening", 10));
  const std::string log = folder.read("err");
  const std::size_t at = log.find("tcp://");
  const std::string address = log.substr(at, log.find('\n', at) - at);
  std::string settings = folder.read("a.yaml");
  settings.replace(settings.find("tcp://127.0.0.1:*"), 17, address);
  folder.write("b.yaml", settings);
  std::string out, err;
  EXPECT_EQ(run({"run", folder.path("b.yaml")}, out, err), 69);
  EXPECT_NE(err.find(address + ": cannot open this address"), std::string::npos) << err;
  EXPECT_EQ(std::count(err.begin(), err.end(), '\n'), 1) << err;
}

TEST(Live, RefusesSamplesAndChangesNothing) {
  const Folder folder;
  folder.write("eu.yaml", eu_settings(folder));
  Process daemon({"run", folder.path("eu.yaml")}, folder.path("run.out"), folder.path("run.err"));
  ASSERT_TRUE(wait_for_text(folder.path("run.err"), "publishing at", 10));
  const std::string in = "ipc://" + folder.path("in");
  std::string out, err;
  folder.write("good.csv", "time,dax,smi,cac,ftse\n1000,1,2,3,4\n2000,2,1,3,4\n");
  EXPECT_EQ(run({"send", in, "--from", folder.path("good.csv")}, out, err), 0) << err;
  folder.write("old.csv", "time,dax,smi,cac,ftse\n1500,1,2,3,4\n");
  EXPECT_EQ(run({"send", in, "--from", folder.path("old.csv")}, out, err), 65);
  EXPECT_NE(err.find("before the last sample's"), std::string::npos) << err;
  folder.write("other.csv", "time,dax,smi,cac,nikkei\n3000,1,2,3,4\n");
  EXPECT_EQ(run({"send", in, "--from", folder.path("other.csv")}, out, err), 69);
  EXPECT_NE(err.find("'nikkei' is not in the settings"), std::string::npos) << err;
}

TEST(CommandLine, AnswersMistakesInOneLine) {
  std::string out, err;
  EXPECT_EQ(run({"rnu"}, out, err), 64);
  EXPECT_EQ(std::count(err.begin(), err.end(), '\n'), 1) << err;
  EXPECT_EQ(run({"check", "/nowhere/x.yaml"}, out, err), 78);
  EXPECT_NE(err.find("/nowhere/x.yaml: "), std::string::npos) << err;
  EXPECT_EQ(run({"tap"}, out, err), 64);
  EXPECT_EQ(run({"send", "tcp://127.0.0.1:1"}, out, err), 64);
  EXPECT_EQ(run({"--help"}, out, err), 0);
  EXPECT_NE(out.find("demo"), std::string::npos);
  EXPECT_EQ(run({"--version"}, out, err), 0);
  EXPECT_EQ(run({"check", "--help"}, out, err), 0);
}

TEST(Demo, SeesWhatWasPlantedAndNothingElse) {
  std::string out, err;
  EXPECT_EQ(run({"demo", "--quick"}, out, err), 0) << out << err;
  EXPECT_EQ(out.find("MISSED"), std::string::npos) << out;
  EXPECT_EQ(run({"demo", "--quick", "--calm"}, out, err), 0) << out << err;
  EXPECT_EQ(out.find("FLAG"), out.find("FLAG:")) << out;  // only the legend says FLAG
}

}  // namespace
}  // namespace tailweir

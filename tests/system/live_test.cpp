// The real program end to end: send -> run -> tap over sockets, against replay and against R.

#include <gtest/gtest.h>
#include <signal.h>

#include <algorithm>
#include <chrono>
#include <cmath>
#include <cstdio>
#include <cstdlib>
#include <map>
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

// Three panels, four horizons.
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
         "      - {name: short, window: 120}\n"
         "  - name: likelihood\n"
         "    channels: all\n"
         "    centre: estimated\n"
         "    degrees_of_freedom: {estimator: likelihood}\n"
         "    horizons:\n"
         "      - {name: window, window: 250, tolerance: 1e-10}\n";
}

enum class Line { estimate, flag, alert };

std::vector<std::string> lines_of(const std::string& text, Line wanted) {
  std::vector<std::string> lines;
  std::istringstream in(text);
  for (std::string line; std::getline(in, line);) {
    const Line kind = line.find("\"severity\"") != std::string::npos ? Line::flag
                      : line.find("\"stage\"") != std::string::npos  ? Line::alert
                                                                     : Line::estimate;
    if (kind == wanted) lines.push_back(line);
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
  const std::string alerts = system_test::read_file(folder.path("replay/alerts.jsonl"));
  const std::vector<std::string> replayed = lines_of(estimates, Line::estimate);
  const std::vector<std::string> replayed_flags = lines_of(flags, Line::flag);
  const std::vector<std::string> replayed_alerts = lines_of(alerts, Line::alert);
  ASSERT_EQ(replayed.size(), 4u * 1859u);
  EXPECT_FALSE(replayed_flags.empty());
  EXPECT_FALSE(replayed_alerts.empty());

  Process daemon({"run", folder.path("eu.yaml")}, folder.path("run.out"), folder.path("run.err"));
  ASSERT_TRUE(wait_for_text(folder.path("run.err"), "publishing at", 10));
  Process tap({"tap", "ipc://" + folder.path("out.sock"), "--json", "--count",
               std::to_string(replayed.size() + replayed_flags.size() + replayed_alerts.size()),
               "--patience", "20"},
              folder.path("tap.out"), folder.path("tap.err"));
  ASSERT_TRUE(wait_for_text(folder.path("tap.err"), "connected", 10));
  ASSERT_EQ(run({"send", "ipc://" + folder.path("in"), "--from", folder.path("eu.csv")}, out, err),
            0)
      << err;
  EXPECT_NE(out.find("1859 samples acknowledged"), std::string::npos) << out;
  ASSERT_EQ(tap.wait(200), 0) << folder.read("tap.err");
  const std::string live = folder.read("tap.out");
  EXPECT_EQ(lines_of(live, Line::estimate), replayed);
  EXPECT_EQ(lines_of(live, Line::flag), replayed_flags);
  EXPECT_EQ(lines_of(live, Line::alert), replayed_alerts);

  daemon.signal(SIGTERM);
  EXPECT_EQ(daemon.wait(1), 0);

  int checked = 0, below = 0;
  // Figures in the live lines: S11 of the sliding window and of the half-life, a distance's
  // p-value.
  for (const std::string& line : lines_of(live, Line::estimate)) {
    const nlohmann::json record = nlohmann::json::parse(line);
    const auto sequence = record["sequence"].get<int>();
    const std::string horizon = record["horizon"];
    if (record["panel"] == "likelihood") {
      const std::map<int, double> nu = {
          {600, 11.93108518}, {1320, 8.366844718}, {1859, 7.967607659}};
      if (nu.count(sequence) > 0) {
        EXPECT_NEAR(record["nu"].get<double>() / nu.at(sequence), 1, 1e-6) << sequence;
        ++checked;
      }
      continue;
    }
    if (horizon == "window" && sequence > 250) below += record["p_value"].get<double>() < .05;
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
  EXPECT_EQ(checked, 3);
  EXPECT_EQ(below, 44);  // .0273 of 1609 one-step forecasts (R)
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

// The reader printed on the wire's page, as it stands there, against a running daemon.
TEST(Live, PythonReaderOfThePageReadsTheWire) {
  const std::string page =
      system_test::read_file(std::string(TAILWEIR_SOURCE_DIR) + "/service/wire/README.md");
  const std::size_t begin = page.find("```python\n");
  ASSERT_NE(begin, std::string::npos);
  const std::string reader = page.substr(begin + 10, page.find("```", begin + 10) - begin - 10);
  EXPECT_LE(std::count(reader.begin(), reader.end(), '\n'), 30);
  const Folder folder;
  folder.write("reader.py", reader);
  folder.write("eu.csv", eu_recording(300));
  folder.write("eu.yaml", eu_settings(folder));
  Process daemon({"run", folder.path("eu.yaml")}, folder.path("run.out"), folder.path("run.err"));
  ASSERT_TRUE(wait_for_text(folder.path("run.err"), "publishing at", 10));
  const std::string command = "timeout 60 /usr/bin/python3 " + folder.path("reader.py") +
                              " ipc://" + folder.path("out.sock") + " 60 > " +
                              folder.path("py.out") + " 2> " + folder.path("py.err") + " &";
  ASSERT_EQ(std::system(command.c_str()), 0);
  // The reader needs a moment to subscribe: send until it has had enough.
  std::string out, err;
  for (int round = 0; round < 40; ++round) {
    std::string text = "time,dax,smi,cac,ftse\n";
    for (int k = 0; k < 50; ++k) {
      text += std::to_string((round * 50 + k + 1) * 1000000000LL) + "," +
              std::to_string(std::sin(k * 1.7)) + "," + std::to_string(std::cos(k * 2.9)) + "," +
              std::to_string(std::sin(k * .3)) + "," + std::to_string(std::cos(k * k * .7)) + "\n";
    }
    folder.write("part.csv", text);
    ASSERT_EQ(
        run({"send", "ipc://" + folder.path("in"), "--from", folder.path("part.csv")}, out, err), 0)
        << err;
    if (wait_for_text(folder.path("py.out"), "estimate/", .2)) break;
  }
  EXPECT_TRUE(wait_for_text(folder.path("py.out"), "estimate/indices/window", 5))
      << folder.read("py.err");
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

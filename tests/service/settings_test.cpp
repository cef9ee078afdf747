// The strict settings reader: what it makes of good files, and the exact line of every bad one.
#include "service/settings/settings.h"

#include <gtest/gtest.h>

#include <cstdio>
#include <fstream>
#include <random>
#include <sstream>

#include "service/report/explain.h"
#include "service/settings/names.h"

namespace tailweir {
namespace {

const char* const kGood = R"(feed:
  listen: tcp://127.0.0.1:7701
  subscribe: [ipc:///run/grid/ticks]
channels:
  - {name: copper, enters_as: level, step: log_difference}
  - {name: tin, enters_as: change, unit: bp, scale: 0.0001}
panels:
  - name: metals
    channels: [copper, tin]
    centre: zero
    degrees_of_freedom: estimated
    shrinkage: none
    horizons:
      - {name: slow, window: 500}
      - {name: fast, half_life: 60, tolerance: 1e-10}
    flags: {rate: 0.001}
    alerts: {mean_samples_between_false: 5000}
publish: {address: "tcp://127.0.0.1:7702"}
control: {address: "tcp://127.0.0.1:7703"}
store: {directory: state}
page: {address: "127.0.0.1:7780"}
)";

std::string replaced(std::string text, const std::string& from, const std::string& to) {
  const std::size_t at = text.find(from);
  EXPECT_NE(at, text.npos) << from;
  return text.replace(at, from.size(), to);
}

std::string fault_of(const std::string& text) {
  const Result<Settings> settings = parse_settings(text, "s.yaml");
  return settings ? "" : settings.fault().line();
}

Settings good_settings(const std::string& from = "", const std::string& to = "") {
  Result<Settings> settings = parse_settings(from.empty() ? kGood : replaced(kGood, from, to), "s");
  EXPECT_TRUE(settings.ok()) << settings.fault().line();
  return settings.value();
}

TEST(Settings, ReadsEveryKeyOfTheExample) {
  const Settings settings = good_settings();
  EXPECT_EQ(settings.feed.listen, "tcp://127.0.0.1:7701");
  EXPECT_EQ(settings.feed.subscribe, std::vector<std::string>{"ipc:///run/grid/ticks"});
  ASSERT_EQ(settings.channels.size(), 2U);
  EXPECT_EQ(settings.channels[0].enters_as, EntersAs::level);
  EXPECT_EQ(settings.channels[1].unit, "bp");
  EXPECT_EQ(settings.channels[1].scale, 0.0001);
  ASSERT_EQ(settings.panels.size(), 1U);
  const PanelSettings& panel = settings.panels[0].core;
  EXPECT_EQ(panel.name, "metals");
  EXPECT_EQ(panel.channels, 2);
  EXPECT_EQ(panel.nu.method, NuMethod::leave_one_out);
  ASSERT_EQ(panel.horizons.size(), 2U);
  EXPECT_EQ(panel.horizons[0].memory.kind, Memory::Kind::window_samples);
  EXPECT_EQ(panel.horizons[0].memory.length, 500);
  EXPECT_FALSE(panel.horizons[0].tolerance.has_value());
  EXPECT_EQ(panel.horizons[1].memory.kind, Memory::Kind::half_life_samples);
  EXPECT_EQ(panel.horizons[1].tolerance, 1e-10);
  EXPECT_EQ(panel.flags.rate, 0.001);
  EXPECT_EQ(panel.flags.severe_rate, 0.0001);
  EXPECT_EQ(settings.panels[0].core.alerts.mean_samples_between_false, 5000);
  EXPECT_EQ(settings.publish_address, "tcp://127.0.0.1:7702");
  EXPECT_EQ(settings.control_address, "tcp://127.0.0.1:7703");
  EXPECT_EQ(settings.store_directory, "state");
  EXPECT_EQ(settings.page_address, "127.0.0.1:7780");
  EXPECT_EQ(not_used(settings), (std::vector<std::string>{"control", "store", "page"}));
}

TEST(Settings, ReadsMemoriesInSamplesAndInTime) {
  const struct {
    const char* text;
    Memory::Kind kind;
    double length;
  } cases[] = {
      {"window: 250ms", Memory::Kind::window_time, 0.25},
      {"window: 90s", Memory::Kind::window_time, 90},
      {"window: 15min", Memory::Kind::window_time, 900},
      {"window: 15m", Memory::Kind::window_time, 900},
      {"window: 6h", Memory::Kind::window_time, 21600},
      {"window: \"2d\"", Memory::Kind::window_time, 172800},
      {"window: 5e2", Memory::Kind::window_samples, 500},
      {"half_life: 12.5", Memory::Kind::half_life_samples, 12.5},
      {"half_life: 1.5h", Memory::Kind::half_life_time, 5400},
  };
  for (const auto& one : cases) {
    const Settings settings = good_settings("window: 500", one.text);
    const Memory& memory = settings.panels[0].core.horizons[0].memory;
    EXPECT_EQ(memory.kind, one.kind) << one.text;
    EXPECT_DOUBLE_EQ(memory.length, one.length) << one.text;
  }
}

TEST(Settings, ReadsEveryFormOfTheEstimator) {
  const auto nu = [](const char* text) {
    return good_settings("degrees_of_freedom: estimated", text).panels[0].core.nu;
  };
  EXPECT_EQ(nu("degrees_of_freedom: 4.5").method, NuMethod::fixed);
  EXPECT_EQ(nu("degrees_of_freedom: 4.5").fixed, 4.5);
  const NuSettings map =
      nu("degrees_of_freedom: {estimator: likelihood, floor: 2, ceiling: 50, prior_rate: 0}");
  EXPECT_EQ(map.method, NuMethod::likelihood);
  EXPECT_EQ(map.floor, 2);
  EXPECT_EQ(map.ceiling, 50);
  EXPECT_EQ(map.prior_rate, 0);
  EXPECT_EQ(nu("degrees_of_freedom: {estimator: censored}").method, NuMethod::censored);
  EXPECT_EQ(nu("degrees_of_freedom: {floor: 1}").method, NuMethod::leave_one_out);
}

TEST(Settings, ReadsCentreShrinkageAndAllChannels) {
  const Settings settings = good_settings(
      "channels: [copper, tin]\n    centre: zero\n    degrees_of_freedom: estimated\n    "
      "shrinkage: none",
      "channels: all\n    centre: [0.5, -1]\n    shrinkage: {toward: given, intensity: 0.25, "
      "target: [[2, 1], [1, 2]]}");
  const PanelSettings& panel = settings.panels[0].core;
  EXPECT_EQ(settings.panels[0].channels, (std::vector<std::size_t>{0, 1}));
  EXPECT_EQ(panel.centre.kind, CentreKind::given);
  EXPECT_EQ(panel.centre.given, Eigen::Vector2d(0.5, -1));
  EXPECT_EQ(panel.shrinkage.intensity, 0.25);
  EXPECT_EQ(panel.shrinkage.given(1, 0), 1);
}

TEST(Settings, TakesATenthOfTheFlagRateAsSevere) {
  EXPECT_DOUBLE_EQ(good_settings("rate: 0.001", "rate: 1e-5").panels[0].core.flags.severe_rate,
                   1e-6);
  EXPECT_DOUBLE_EQ(good_settings("rate: 0.001", "rate: 0.2").panels[0].core.flags.severe_rate,
                   1e-4);
}

TEST(Settings, AcceptsAnyHostAndPortOnlyForItsOwnAddresses) {
  good_settings("listen: tcp://127.0.0.1:7701", "listen: tcp://*:*");
  good_settings("listen: tcp://127.0.0.1:7701", "listen: tcp://[::1]:7701");
  EXPECT_NE(fault_of(replaced(kGood, "ipc:///run/grid/ticks", "'tcp://127.0.0.1:*'")), "");
}

struct BadCase {
  const char* from;  // replaced in kGood; empty: `to` is the whole file
  const char* to;
  const char* fault;  // how the line starts
};

const BadCase kBadCases[] = {
    // The document.
    {"", "", "s.yaml:1:1: is empty"},
    {"", "# nothing\n", "s.yaml:1:1: "},
    {"", "just words\n", "s.yaml:1:1: the settings is \"just words\"; write a map with the keys"},
    {"", "[1, 2]\n", "s.yaml:1:1: the settings is a list"},
    {"", "feed: [\n", "s.yaml:2:1: is not valid YAML: "},
    {"", "a: b: c\n", "s.yaml:1:5: is not valid YAML: "},
    {"store: {directory: state}", "store: {directory: \"state}", "s.yaml:"},
    {"page:", "---\npage:", "s.yaml:22:1: a second document starts here; one document a file"},
    {"feed:", "feed: &f", "s.yaml:1:7: an anchor (&) is not accepted; write the value out"},
    {"directory: state", "directory: *f", "s.yaml:20:"},
    {"rate: 0.001", "rate: !!float 0.001", "s.yaml:16:19: a tag (!) is not accepted"},
    {"feed:", "? [1]\n: 2\nfeed:", "s.yaml:1:3: a map or list cannot be a key; keys are words"},
    {"window: 500", "window: [[[[[[[[[[[[[1]]]]]]]]]]]]]", "s.yaml:14:"},
    // Keys.
    {"feed:", "fed:", "s.yaml:1:1: unknown key \"fed\" in the settings; did you mean feed?"},
    {"store:", "zzz:",
     "s.yaml:20:1: unknown key \"zzz\" in the settings; known are feed, channels, panels, publish, "
     "control, store or page"},
    {"window: 500", "windw: 500",
     "s.yaml:14:22: unknown key \"windw\" in a horizon; did you mean window?"},
    {"rate: 0.001", "rat: 0.001", "s.yaml:16:13: unknown key \"rat\" in flags; did you mean rate?"},
    {"store: {directory: state}", "store: {directory: state}\nfeed: {listen: tcp://a:1}",
     "s.yaml:21:1: key \"feed\" stands twice, first in line 1; keep one of them"},
    {"window: 500}", "window: 500, window: 6h}",
     "s.yaml:14:35: key \"window\" stands twice, first in line 14"},
    {"", "channels:\n  - {name: a}\n", "s.yaml:1:1: the settings lacks the key panels"},
    {"name: slow, ", "", "s.yaml:14:9: a horizon lacks the key name; add name: ..."},
    {"    channels: [copper, tin]\n", "", "s.yaml:8:5: a panel lacks the key channels"},
    {"{address: \"tcp://127.0.0.1:7702\"}", "{}", "s.yaml:18:10: publish lacks the key address"},
    // Feed and addresses.
    {"listen: tcp://127.0.0.1:7701", "listen: 127.0.0.1:7701",
     "s.yaml:2:11: listen: \"127.0.0.1:7701\" is no address; write tcp://HOST:PORT or ipc:///PATH"},
    {"listen: tcp://127.0.0.1:7701", "listen: tcp://127.0.0.1:77010",
     "s.yaml:2:11: listen: \"tcp://127.0.0.1:77010\" has no good host and port"},
    {"listen: tcp://127.0.0.1:7701", "listen: tcp://:7701", "s.yaml:2:11: listen: \"tcp://:7701\""},
    {"listen: tcp://127.0.0.1:7701", "listen:", "s.yaml:2:3: listen is nothing; write tcp://"},
    {"[ipc:///run/grid/ticks]", "ipc:///run/grid/ticks",
     "s.yaml:3:14: subscribe is \"ipc:///run/grid/ticks\"; write a list"},
    {"[ipc:///run/grid/ticks]", "[ipc:///a, ipc:///a]",
     "s.yaml:3:25: address \"ipc:///a\" stands twice"},
    {"[ipc:///run/grid/ticks]", "[]", "s.yaml:3:14: subscribe is an empty list"},
    {"ipc:///run/grid/ticks", "ipc://", "s.yaml:3:15: subscribe: \"ipc://\" has no good path"},
    {"127.0.0.1:7702", "127.0.0.1:7701",
     "s.yaml:18:20: address \"tcp://127.0.0.1:7701\" is also that of feed; give each its own port"},
    {"\"127.0.0.1:7780\"", "tcp://127.0.0.1:7780",
     "s.yaml:21:17: address: \"tcp://127.0.0.1:7780\""},
    {"{directory: state}", "{directory: [state]}",
     "s.yaml:20:20: directory is a list; write a text"},
    // Channels.
    {"name: copper", "name: Copper",
     "s.yaml:5:12: name: \"Copper\" is no name; use 1 to 31 of a-z 0-9 _ . -"},
    {"name: tin", "name: copper", "s.yaml:6:12: channel \"copper\" stands twice"},
    {"enters_as: level", "enters_as: levels",
     "s.yaml:5:31: enters_as is \"levels\"; did you mean level?"},
    {"step: log_difference", "step: percent",
     "s.yaml:5:44: step is \"percent\"; write log_difference, difference or relative_difference"},
    {"unit: bp", "step: difference", "s.yaml:6:42: step has no meaning for a channel that enters"},
    {"scale: 0.0001", "scale: 0", "s.yaml:6:53: scale is 0; write a number other than 0"},
    {"scale: 0.0001", "scale: \"2\"", "s.yaml:6:53: scale is a text in quotes; write 2 without"},
    {"scale: 0.0001", "scale: .inf", "s.yaml:6:53: scale is \".inf\"; write a finite number"},
    {"scale: 0.0001", "scale: 1e999", "s.yaml:6:53: scale is \"1e999\"; write a finite number"},
    {"- {name: tin, enters_as: change, unit: bp, scale: 0.0001}", "- [tin]",
     "s.yaml:6:5: a channel is a list; write a map with the keys name"},
    // Panels.
    {"[copper, tin]", "[copper, tinn]", "s.yaml:9:24: unknown channel \"tinn\"; did you mean tin?"},
    {"[copper, tin]", "[copper, uranium]",
     "s.yaml:9:24: unknown channel \"uranium\"; name one of the channels above"},
    {"[copper, tin]", "[copper, copper]",
     "s.yaml:9:24: channel \"copper\" stands twice in the panel"},
    {"[copper, tin]", "every", "s.yaml:9:15: channels is \"every\"; write all"},
    {"[copper, tin]", "{}", "s.yaml:9:15: channels is a map; write a list"},
    {"centre: zero", "centre: middle",
     "s.yaml:10:13: centre is \"middle\"; write zero or estimated"},
    {"centre: zero", "centre: [1]", "s.yaml:10:13: centre has 1 numbers; one per channel: 2"},
    {"centre: zero", "centre: [1, x]", "s.yaml:10:17: centre is \"x\"; write a finite number"},
    {"freedom: estimated", "freedom: estimate",
     "s.yaml:11:25: degrees_of_freedom is \"estimate\"; did you mean estimated?"},
    {"freedom: estimated", "freedom: -3",
     "s.yaml:11:25: degrees_of_freedom is -3; write a number above 0"},
    {"freedom: estimated", "freedom: {estimator: maximum}",
     "s.yaml:11:37: estimator is \"maximum\"; write leave_one_out, likelihood"},
    {"freedom: estimated", "freedom: {floor: 10, ceiling: 5}",
     "s.yaml:11:46: the ceiling 5 is not above the floor 10"},
    {"freedom: estimated", "freedom: {floor: 0}",
     "s.yaml:11:33: floor is 0; write a number above 0"},
    {"freedom: estimated", "freedom: {prior_rate: -1}", "s.yaml:11:38: prior_rate is -1"},
    {"shrinkage: none", "shrinkage: some", "s.yaml:12:16: shrinkage is \"some\""},
    {"shrinkage: none", "shrinkage: {toward: identity, intensity: 1.5}",
     "s.yaml:12:46: intensity is 1.5; write automatic or a number from 0 to 1"},
    {"shrinkage: none", "shrinkage: {intensity: 0.5}",
     "s.yaml:12:16: shrinkage lacks the key toward"},
    {"shrinkage: none", "shrinkage: {toward: given}",
     "s.yaml:12:25: toward: given lacks the key target"},
    {"shrinkage: none", "shrinkage: {toward: identity, target: [[1]]}",
     "s.yaml:12:43: target is only for toward: given"},
    {"shrinkage: none", "shrinkage: {toward: given, target: [[1, 2], [2, 1]]}",
     "s.yaml:12:40: the target is not positive definite"},
    {"shrinkage: none", "shrinkage: {toward: given, target: [[1, 0], [0.5, 1]]}",
     "s.yaml:12:50: target is not symmetric: row 2, column 1"},
    {"shrinkage: none", "shrinkage: {toward: given, target: [[1, 0]]}",
     "s.yaml:12:40: target has 1 rows; one per channel: 2"},
    // Horizons and flags.
    {"window: 500", "window: 2",
     "s.yaml:14:30: a memory of 2 samples is too short for 2 channels; at least 3"},
    {"half_life: 60", "half_life: 0.5", "s.yaml:15:33: a memory of "},
    {"window: 500", "window: 0", "s.yaml:14:30: window is 0; write a length above 0"},
    {"window: 500", "window: 10.5", "s.yaml:14:30: window is \"10.5\"; write a whole number"},
    {"window: 500", "window: 5 weeks", "s.yaml:14:30: window is \"5 weeks\"; write a whole number"},
    {"window: 500", "window: 15 m", "s.yaml:14:30: window is \"15 m\"; write a whole number"},
    {"window: 500", "window: -6h", "s.yaml:14:30: window is -6h; write a length above 0"},
    {"window: 500", "window: 1e15", "s.yaml:14:30: window is 1e15; at most 10000000 samples"},
    {"half_life: 60", "half_life: -60", "s.yaml:15:33: half_life is -60; write a length above 0"},
    {"half_life: 60", "half_life: 60, window: 6h",
     "s.yaml:15:9: horizon \"fast\" has a window and a half_life"},
    {"half_life: 60, ", "", "s.yaml:15:9: horizon \"fast\" has no memory"},
    {"name: fast", "name: slow", "s.yaml:15:16: horizon \"slow\" stands twice"},
    {"tolerance: 1e-10", "tolerance: 0", "s.yaml:15:48: tolerance is 0; write a number above 0"},
    {"tolerance: 1e-10", "tolerance: 1e-20", "s.yaml:15:48: the tolerance is out of range"},
    {"rate: 0.001", "rate: 1", "s.yaml:16:19: rate is 1; write a share of the samples between"},
    {"rate: 0.001", "rate: 0.001, severe_rate: 0.01",
     "s.yaml:16:39: the rate of severe flags is above the rate of flags"},
    {"flags: {rate: 0.001}", "flags: 0.001", "s.yaml:16:12: flags is \"0.001\"; write a map"},
    {"false: 5000", "false: 0", "s.yaml:17:42: mean_samples_between_false is 0"},
};

TEST(Settings, NamesPlaceTroubleAndCureOfEveryBadFile) {
  EXPECT_GE(std::size(kBadCases), 40U);
  for (const BadCase& bad : kBadCases) {
    const std::string text =
        std::string(bad.from).empty() ? bad.to : replaced(kGood, bad.from, bad.to);
    const std::string fault = fault_of(text);
    EXPECT_EQ(fault.substr(0, std::string(bad.fault).size()), bad.fault) << bad.to;
    EXPECT_EQ(fault.find('\n'), fault.npos) << "one line";
  }
}

TEST(Settings, RefusesTwoPanelsOfOneName) {
  const std::string two = replaced(
      kGood,
      "publish:", "  - {name: metals, channels: all, horizons: [{name: a, window: 9}]}\npublish:");
  EXPECT_EQ(fault_of(two).substr(0, 42), "s.yaml:18:12: panel \"metals\" stands twice;");
}

TEST(Settings, FindsTheHorizonWhoseNameHasPoints) {
  const std::string text = replaced(kGood, "name: slow, window: 500", "name: a.b-1, window: 1");
  EXPECT_EQ(fault_of(text).substr(0, 14), "s.yaml:14:31: ") << fault_of(text);
}

TEST(Settings, RefusesAFileAboveOneMegabyteAndOneThatIsNotThere) {
  EXPECT_EQ(fault_of(std::string(1'000'001, '#')).substr(0, 27), "s.yaml: is larger than 1 MB");
  const Result<Settings> none = load_settings("/nonexistent/s.yaml");
  ASSERT_FALSE(none.ok());
  EXPECT_EQ(none.fault().line().substr(0, 36), "/nonexistent/s.yaml: cannot be read:");
  EXPECT_FALSE(load_settings("/").ok());
}

TEST(Settings, EveryExampleOfTheConfigFolderLoadsWithoutCaution) {
  for (const char* name : {"metals", "sensors"}) {
    const std::string path = std::string(TAILWEIR_SOURCE_DIR "/config/") + name + ".yaml";
    const Result<Settings> settings = load_settings(path);
    ASSERT_TRUE(settings.ok()) << settings.fault().line();
    EXPECT_TRUE(not_used(settings.value()).empty()) << path;
    EXPECT_TRUE(cautions(settings.value()).empty()) << path;
    EXPECT_EQ(explain(settings.value()).substr(0, path.size() + 8), path + " is good");
  }
}

TEST(Settings, ExplainSaysWhatIsNotUsedAndWhatIsUnwise) {
  Settings settings = good_settings("window: 500", "window: 9");
  settings.publish_address.reset();
  const std::string text = explain(settings);
  EXPECT_NE(text.find("\nnot used by this version\n  control\n  store\n  page"), text.npos);
  EXPECT_NE(text.find("panel metals, horizon slow: 9 samples for 2 channels make a noisy scatter; "
                      "10 or more are better"),
            text.npos);
  EXPECT_NE(text.find("no publish address"), text.npos);
}

TEST(Settings, FiveThousandMutationsNeverCrashAndEachFaultIsOneLine) {
  // Brute force, deterministic (seed 17): byte edits, swapped lines and spliced pieces of a good
  // file.
  std::mt19937_64 random(17);
  const std::string bytes = "{}[]:,-&*!|>'\"%@`#?~ \n\t\\0e.\x01\x80\xff";
  int accepted = 0;
  for (int i = 0; i < 5000; ++i) {
    std::string text = kGood;
    for (std::uint64_t k = random() % 5 + 1; k > 0; --k) {
      const std::size_t at = random() % text.size();
      switch (random() % 4) {
        case 0:
          text[at] = bytes[random() % bytes.size()];
          break;
        case 1:
          text.insert(at, 1, bytes[random() % bytes.size()]);
          break;
        case 2:
          text.erase(at, random() % 12);
          break;
        default:
          text.insert(at, text.substr(random() % text.size(), random() % 60));
          break;
      }
      if (text.empty()) break;
    }
    const Result<Settings> settings = parse_settings(text, "s.yaml");
    if (settings) {
      ++accepted;
      ASSERT_FALSE(explain(settings.value()).empty());
    } else {
      const std::string line = settings.fault().line();
      ASSERT_EQ(line.find('\n'), line.npos) << line;
      ASSERT_EQ(line.substr(0, 7), "s.yaml:") << line;
    }
  }
  EXPECT_GT(accepted, 0) << "some edits are harmless";
}

TEST(Names, NearestWordIsTheOneMistyped) {
  const std::vector<std::string> known = {"window", "half_life", "tolerance"};
  EXPECT_EQ(nearest("widnow", known), "window");
  EXPECT_EQ(nearest("halflife", known), "half_life");
  EXPECT_EQ(nearest("colour", known), "");
  EXPECT_EQ(nearest(std::string(1000, 'w'), known), "");
}

}  // namespace
}  // namespace tailweir

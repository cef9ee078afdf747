// Settings of the daemon as plain checked structs, and the strict reader of their YAML form.
//
// The file format is described in config/README.md; every key there is a member here. Unknown keys,
// duplicate keys, aliases, wrong types and wrong units are refused as FILE:LINE:COLUMN: what is
// wrong; what would be right. yaml-cpp is included by document.cpp only. Thread rule: plain values.
#pragma once

#include <optional>
#include <string>
#include <vector>

#include "core/result.h"
#include "core/settings.h"

namespace tailweir {

enum class EntersAs { level, change };
enum class Step { log_difference, difference, relative_difference };

struct ChannelSettings {
  std::string name;  // [a-z0-9_.-]{1,31}
  EntersAs enters_as = EntersAs::change;
  Step step = Step::log_difference;  // for EntersAs::level
  std::string unit;                  // a label only
  double scale = 1;                  // multiplies the change; finite, not 0
};

struct PanelInput {
  std::vector<std::size_t> channels;  // indices into Settings::channels, in the panel's order
  PanelSettings core;                 // name, horizons and all that the core needs
};

struct FeedSettings {
  std::optional<std::string> listen;   // ZeroMQ address of the acknowledged intake
  std::vector<std::string> subscribe;  // ZeroMQ addresses of plain feeds
};

struct Settings {
  FeedSettings feed;
  std::vector<ChannelSettings> channels;
  std::vector<PanelInput> panels;
  std::optional<std::string> publish_address;
  std::optional<std::string> control_address;
  std::optional<std::string> store_directory;
  std::optional<std::string> page_address;  // HOST:PORT
  std::string source;                       // file name it came from, for messages
};

// Reads and checks a settings file (at most 1 MB). Fault: one line with file, line and column.
Result<Settings> load_settings(const std::string& path);
// The same from text; name stands for the file in messages.
Result<Settings> parse_settings(const std::string& text, const std::string& name);

// What the settings ask for and this version does not do, as keys ("store",
// "panels.metals.alerts"): accepted so that one file serves several versions, and said plainly by
// `check` and `run`.
std::vector<std::string> not_used(const Settings& settings);

}  // namespace tailweir

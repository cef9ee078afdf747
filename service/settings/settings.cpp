#include "service/settings/settings.h"

#include <algorithm>
#include <cmath>
#include <fstream>
#include <map>
#include <set>
#include <sstream>

#include "service/settings/yaml_reader.h"

namespace tailweir {
namespace {

using yaml::Reader;

// Where each key of a panel stands, so that validate()'s fault finds its line.
using Marks = std::map<std::string, YAML::Mark>;

bool valid_name(const std::string& name) {
  if (name.empty() || name.size() > 31) return false;
  return std::all_of(name.begin(), name.end(), [](char c) {
    return (c >= 'a' && c <= 'z') || (c >= '0' && c <= '9') || c == '_' || c == '.' || c == '-';
  });
}

const char* const kNameRule = "1 to 31 of a-z 0-9 _ . -";

std::string read_name(Reader& reader, const YAML::Node& node, const std::string& what) {
  const std::string name = reader.text(node, what, kNameRule);
  if (reader.ok() && !valid_name(name))
    reader.fail(node, what + " '" + name + "' is not a name", kNameRule);
  return name;
}

std::string read_address(Reader& reader, const YAML::Node& node, const std::string& key) {
  const std::string allowed = "tcp://HOST:PORT or ipc://PATH";
  const std::string address = reader.text(node, key, allowed);
  if (!reader.ok()) return address;
  const bool ipc = address.rfind("ipc://", 0) == 0 && address.size() > 6;
  bool tcp = address.rfind("tcp://", 0) == 0;
  if (tcp) {
    const std::size_t colon = address.rfind(':');
    const std::string port = address.substr(colon + 1);
    const bool digits =
        !port.empty() && port.size() <= 5 &&
        std::all_of(port.begin(), port.end(), [](char c) { return c >= '0' && c <= '9'; });
    tcp =
        colon > 6 && (port == "*" || (digits && std::stoi(port) >= 1 && std::stoi(port) <= 65535));
  }
  if (!ipc && !tcp) reader.fail(node, key + " '" + address + "' is not an address", allowed);
  return address;
}

void read_feed(Reader& reader, const YAML::Node& node, FeedSettings& feed) {
  reader.map(node, "feed", {"listen", "subscribe"},
             [&](const std::string& key, const YAML::Node& value) {
               if (key == "listen") feed.listen = read_address(reader, value, "listen");
               if (key == "subscribe") {
                 reader.list(value, "subscribe", [&](const YAML::Node& element) {
                   feed.subscribe.push_back(read_address(reader, element, "subscribe"));
                 });
               }
             });
  if (reader.ok() && !feed.listen && feed.subscribe.empty()) {
    reader.fail(node, "feed has no source", "listen: ADDRESS, or subscribe: [ADDRESS, ...]");
  }
}

void read_channel(Reader& reader, const YAML::Node& node, Settings& settings,
                  std::set<std::string>& names) {
  ChannelSettings channel;
  bool has_step = false;
  if (node.IsScalar()) {
    channel.name = read_name(reader, node, "channel name");
  } else {
    YAML::Node step_node;
    reader.map(node, "a channel", {"name", "enters_as", "step", "unit", "scale"},
               [&](const std::string& key, const YAML::Node& value) {
                 if (key == "name") channel.name = read_name(reader, value, "channel name");
                 if (key == "enters_as") {
                   const std::string word = reader.text(value, key, "level or change");
                   if (word == "level") {
                     channel.enters_as = EntersAs::level;
                   } else if (word != "change") {
                     reader.fail(value, "enters_as '" + word + "' is unknown", "level or change");
                   }
                 }
                 if (key == "step") {
                   const std::string allowed = "log_difference, difference or relative_difference";
                   const std::string word = reader.text(value, key, allowed);
                   has_step = true;
                   step_node = value;
                   if (word == "difference") {
                     channel.step = Step::difference;
                   } else if (word == "relative_difference") {
                     channel.step = Step::relative_difference;
                   } else if (word != "log_difference") {
                     reader.fail(value, "step '" + word + "' is unknown", allowed);
                   }
                 }
                 if (key == "unit") channel.unit = reader.text(value, key, "a label such as bp");
                 if (key == "scale") {
                   channel.scale = reader.number(value, key, "a number other than 0");
                   if (reader.ok() && channel.scale == 0) {
                     reader.fail(value, "scale 0 would erase the channel", "a number other than 0");
                   }
                 }
               });
    if (reader.ok() && channel.name.empty())
      reader.fail(node, "a channel has no name", "name: NAME");
    if (reader.ok() && has_step && channel.enters_as == EntersAs::change) {
      reader.fail(step_node, "step is for channels that enter as levels",
                  "enters_as: level, or no step");
    }
  }
  if (reader.ok() && !names.insert(channel.name).second) {
    reader.fail(node, "channel '" + channel.name + "' is listed twice", "distinct names");
  }
  settings.channels.push_back(channel);
}

void read_centre(Reader& reader, const YAML::Node& node, CentreSettings& centre) {
  const std::string allowed = "zero, estimated, or a list of numbers";
  if (node.IsSequence()) {
    std::vector<double> values;
    reader.list(node, "centre", [&](const YAML::Node& element) {
      values.push_back(reader.number(element, "centre", "a number"));
    });
    centre.kind = CentreKind::given;
    centre.given = Eigen::Map<Eigen::VectorXd>(values.data(), static_cast<Index>(values.size()));
    return;
  }
  const std::string word = reader.text(node, "centre", allowed);
  if (word == "estimated") {
    centre.kind = CentreKind::estimated;
  } else if (reader.ok() && word != "zero") {
    reader.fail(node, "centre '" + word + "' is unknown", allowed);
  }
}

void read_nu(Reader& reader, const YAML::Node& node, NuSettings& nu, Marks& marks) {
  const std::string allowed =
      "estimated, a number above 0, or {estimator: leave_one_out, floor: 0.3, ceiling: 1000}";
  if (reader.is_number(node)) {
    nu.method = NuMethod::fixed;
    nu.fixed = reader.number(node, "degrees_of_freedom", allowed);
    return;
  }
  if (node.IsScalar()) {
    if (reader.text(node, "degrees_of_freedom", allowed) != "estimated") {
      reader.fail(node, "degrees_of_freedom '" + node.Scalar() + "' is unknown", allowed);
    }
    return;
  }
  reader.map(node, "degrees_of_freedom", {"estimator", "floor", "ceiling", "prior_rate"},
             [&](const std::string& key, const YAML::Node& value) {
               marks["degrees_of_freedom." + key] = value.Mark();
               if (key == "floor") nu.floor = reader.number(value, key, "a number above 0");
               if (key == "ceiling")
                 nu.ceiling = reader.number(value, key, "a number above the floor");
               if (key == "prior_rate")
                 nu.prior_rate = reader.number(value, key, "a number, 10 by default");
               if (key != "estimator") return;
               static const std::map<std::string, NuMethod> kMethods = {
                   {"leave_one_out", NuMethod::leave_one_out},
                   {"likelihood", NuMethod::likelihood},
                   {"pop", NuMethod::pop},
                   {"trace_ratio", NuMethod::trace_ratio},
                   {"kurtosis", NuMethod::kurtosis},
                   {"censored", NuMethod::censored}};
               const std::string words =
                   "leave_one_out, likelihood, pop, trace_ratio, kurtosis or censored";
               const std::string word = reader.text(value, key, words);
               const auto found = kMethods.find(word);
               if (found != kMethods.end()) {
                 nu.method = found->second;
               } else {
                 reader.fail(value, "estimator '" + word + "' is unknown", words);
               }
             });
}

void read_shrinkage(Reader& reader, const YAML::Node& node, ShrinkageSettings& shrinkage,
                    Marks& marks) {
  const std::string allowed =
      "none, or {toward: identity | diagonal | constant_correlation | given, intensity: automatic}";
  if (node.IsScalar()) {
    if (reader.text(node, "shrinkage", allowed) != "none") {
      reader.fail(node, "shrinkage '" + node.Scalar() + "' is unknown", allowed);
    }
    return;
  }
  reader.map(node, "shrinkage", {"toward", "intensity", "target"},
             [&](const std::string& key, const YAML::Node& value) {
               marks["shrinkage." + key] = value.Mark();
               if (key == "toward") {
                 const std::string words = "identity, diagonal, constant_correlation or given";
                 const std::string word = reader.text(value, key, words);
                 if (word == "identity") {
                   shrinkage.target = ShrinkageTarget::identity;
                 } else if (word == "diagonal") {
                   shrinkage.target = ShrinkageTarget::diagonal;
                 } else if (word == "constant_correlation") {
                   shrinkage.target = ShrinkageTarget::constant_correlation;
                 } else if (word == "given") {
                   shrinkage.target = ShrinkageTarget::given;
                 } else {
                   reader.fail(value, "toward '" + word + "' is unknown", words);
                 }
               }
               if (key == "intensity") {
                 if (value.IsScalar() && value.Scalar() == "automatic") return;
                 shrinkage.intensity =
                     reader.number(value, key, "automatic, or a number from 0 to 1");
               }
               if (key == "target") {
                 std::vector<std::vector<double>> rows;
                 reader.list(value, "target", [&](const YAML::Node& row) {
                   rows.emplace_back();
                   reader.list(row, "a row of target", [&](const YAML::Node& element) {
                     rows.back().push_back(reader.number(element, "target", "a number"));
                   });
                 });
                 const Index n = static_cast<Index>(rows.size());
                 shrinkage.given.setZero(n, n);
                 for (Index i = 0; i < n && reader.ok(); ++i) {
                   const std::vector<double>& row = rows[static_cast<std::size_t>(i)];
                   if (static_cast<Index>(row.size()) != n) {
                     reader.fail(value, "target is not square", "as many rows as columns");
                     return;
                   }
                   for (Index j = 0; j < n; ++j)
                     shrinkage.given(i, j) = row[static_cast<std::size_t>(j)];
                 }
               }
             });
  if (reader.ok() && shrinkage.target == ShrinkageTarget::none) {
    reader.fail(node, "shrinkage does not say toward what", allowed);
  }
}

// window and half_life: a number of samples, or a time.
Memory read_memory(Reader& reader, const YAML::Node& node, const std::string& key) {
  const std::string allowed = "a number of samples, or a time such as 90s, 15m, 6h, 2d";
  Memory memory;
  const bool half = key == "half_life";
  if (reader.is_number(node)) {
    memory.kind = half ? Memory::Kind::half_life_samples : Memory::Kind::window_samples;
    memory.length = reader.number(node, key, allowed);
    return memory;
  }
  const std::string text = reader.text(node, key, allowed);
  if (!reader.ok()) return memory;
  const std::optional<double> seconds = Reader::seconds(text);
  if (!seconds) reader.fail(node, key + " '" + text + "' is not a memory", allowed);
  memory.kind = half ? Memory::Kind::half_life_time : Memory::Kind::window_time;
  memory.length = seconds.value_or(1);
  return memory;
}

HorizonSettings read_horizon(Reader& reader, const YAML::Node& node, Marks& marks) {
  HorizonSettings horizon;
  int memories = 0;
  Marks own;
  reader.map(node, "a horizon", {"name", "window", "half_life", "tolerance"},
             [&](const std::string& key, const YAML::Node& value) {
               own[key] = value.Mark();
               if (key == "name") horizon.name = read_name(reader, value, "horizon name");
               if (key == "window" || key == "half_life") {
                 horizon.memory = read_memory(reader, value, key);
                 ++memories;
               }
               if (key == "tolerance") {
                 horizon.tolerance =
                     reader.number(value, key, "a number such as 1e-10, or leave it out");
               }
             });
  if (reader.ok() && horizon.name.empty()) reader.fail(node, "a horizon has no name", "name: NAME");
  if (reader.ok() && memories != 1) {
    reader.fail(node, "horizon '" + horizon.name + "' needs one memory",
                "either window or half_life");
  }
  const std::string prefix = "horizons." + horizon.name;
  marks.try_emplace(prefix, node.Mark());
  for (const auto& [key, mark] : own) marks.try_emplace(prefix + "." + key, mark);
  return horizon;
}

void read_panel_channels(Reader& reader, const YAML::Node& node, const Settings& settings,
                         PanelInput& panel) {
  if (node.IsScalar() && node.Scalar() == "all") {
    for (std::size_t k = 0; k < settings.channels.size(); ++k) panel.channels.push_back(k);
    return;
  }
  reader.list(node, "channels", [&](const YAML::Node& element) {
    const std::string name = reader.text(element, "a channel of a panel", "a channel's name");
    std::vector<std::string> known;
    for (std::size_t k = 0; k < settings.channels.size(); ++k) {
      known.push_back(settings.channels[k].name);
      if (known.back() != name) continue;
      if (std::find(panel.channels.begin(), panel.channels.end(), k) != panel.channels.end()) {
        reader.fail(element, "channel '" + name + "' is listed twice in the panel",
                    "each channel once");
      }
      panel.channels.push_back(k);
      return;
    }
    const std::string near = yaml::nearest(name, known);
    reader.fail(element, "panel names an unknown channel '" + name + "'",
                near.empty() ? "a name from channels" : "did you mean '" + near + "'?");
  });
}

void read_flags(Reader& reader, const YAML::Node& node, FlagSettings& flags, Marks& marks) {
  bool severe_given = false;
  reader.map(node, "flags", {"rate", "severe_rate"},
             [&](const std::string& key, const YAML::Node& value) {
               marks["flags." + key] = value.Mark();
               if (key == "rate") flags.rate = reader.number(value, key, "a share such as 0.001");
               if (key == "severe_rate") {
                 flags.severe_rate = reader.number(value, key, "a share such as 0.0001");
                 severe_given = true;
               }
             });
  if (!severe_given) flags.severe_rate = flags.rate / 10;
}

void read_panel(Reader& reader, const YAML::Node& node, Settings& settings) {
  PanelInput panel;
  Marks marks;
  reader.map(node, "a panel",
             {"name", "channels", "centre", "degrees_of_freedom", "shrinkage", "horizons", "flags",
              "alerts"},
             [&](const std::string& key, const YAML::Node& value) {
               marks[key] = value.Mark();
               if (key == "name") panel.core.name = read_name(reader, value, "panel name");
               if (key == "channels") read_panel_channels(reader, value, settings, panel);
               if (key == "centre") read_centre(reader, value, panel.core.centre);
               if (key == "degrees_of_freedom") read_nu(reader, value, panel.core.nu, marks);
               if (key == "shrinkage") read_shrinkage(reader, value, panel.core.shrinkage, marks);
               if (key == "flags") read_flags(reader, value, panel.core.flags, marks);
               if (key == "horizons") {
                 reader.list(value, "horizons", [&](const YAML::Node& element) {
                   panel.core.horizons.push_back(read_horizon(reader, element, marks));
                 });
               }
               if (key == "alerts") {
                 reader.map(value, "alerts", {"mean_samples_between_false"},
                            [&](const std::string&, const YAML::Node& mean) {
                              panel.alerts.given = true;
                              panel.alerts.mean_samples_between_false = reader.number(
                                  mean, "mean_samples_between_false", "a number above 100");
                              if (reader.ok() && !(panel.alerts.mean_samples_between_false > 100)) {
                                reader.fail(mean, "mean_samples_between_false is too small",
                                            "a number above 100, such as 5000");
                              }
                            });
               }
             });
  if (!reader.ok()) return;
  if (panel.core.name.empty()) return reader.fail(node, "a panel has no name", "name: NAME");
  for (const PanelInput& other : settings.panels) {
    if (other.core.name == panel.core.name) {
      return reader.fail(node, "two panels are named '" + panel.core.name + "'", "distinct names");
    }
  }
  if (panel.channels.empty()) {
    return reader.fail(node, "panel '" + panel.core.name + "' has no channels",
                       "channels: all, or a list");
  }
  panel.core.channels = static_cast<Index>(panel.channels.size());
  Result<PanelSettings> checked = validate(panel.core);
  if (!checked) {
    const Fault& fault = checked.fault();
    // The longest known prefix of the key has the nearest mark.
    std::string key = fault.where;
    while (!key.empty() && marks.find(key) == marks.end()) {
      const std::size_t dot = key.rfind('.');
      key = dot == std::string::npos ? "" : key.substr(0, dot);
    }
    const YAML::Mark mark = key.empty() ? node.Mark() : marks[key];
    return reader.fail(mark, "panel '" + panel.core.name + "': " + fault.what, fault.allowed);
  }
  settings.panels.push_back(std::move(panel));
}

void read_one_key(Reader& reader, const YAML::Node& node, const std::string& what,
                  const std::string& only, const std::function<void(const YAML::Node&)>& each) {
  bool given = false;
  reader.map(node, what, {only}, [&](const std::string&, const YAML::Node& value) {
    given = true;
    each(value);
  });
  if (reader.ok() && !given) reader.fail(node, what + " has no " + only, only + ": ...");
}

void read_root(Reader& reader, const YAML::Node& root, Settings& settings) {
  if (!root.IsMap()) {
    return reader.fail(root, "the settings are empty or not a map",
                       "keys feed, channels, panels, publish; see config/README.md");
  }
  // channels come first whatever the order in the file: panels refer to them.
  std::map<std::string, YAML::Node> parts;
  reader.map(root, "the settings",
             {"feed", "channels", "panels", "publish", "control", "store", "page"},
             [&](const std::string& key, const YAML::Node& value) { parts[key] = value; });
  for (const char* needed : {"channels", "panels"}) {
    if (reader.ok() && parts.find(needed) == parts.end()) {
      return reader.fail(root, std::string("the settings have no ") + needed,
                         std::string(needed) + ": [...]");
    }
  }
  if (!reader.ok()) return;
  std::set<std::string> names;
  reader.list(parts["channels"], "channels",
              [&](const YAML::Node& element) { read_channel(reader, element, settings, names); });
  if (reader.ok() && settings.channels.empty()) {
    return reader.fail(parts["channels"], "channels is empty", "at least one channel");
  }
  reader.list(parts["panels"], "panels",
              [&](const YAML::Node& element) { read_panel(reader, element, settings); });
  if (reader.ok() && settings.panels.empty()) {
    return reader.fail(parts["panels"], "panels is empty", "at least one panel");
  }
  if (parts.count("feed") > 0) read_feed(reader, parts["feed"], settings.feed);
  if (parts.count("publish") > 0) {
    read_one_key(reader, parts["publish"], "publish", "address", [&](const YAML::Node& value) {
      settings.publish_address = read_address(reader, value, "address");
    });
  }
  if (parts.count("control") > 0) {
    read_one_key(reader, parts["control"], "control", "address", [&](const YAML::Node& value) {
      settings.control_address = read_address(reader, value, "address");
    });
  }
  if (parts.count("store") > 0) {
    read_one_key(reader, parts["store"], "store", "directory", [&](const YAML::Node& value) {
      settings.store_directory = reader.text(value, "directory", "a path");
    });
  }
  if (parts.count("page") > 0) {
    read_one_key(reader, parts["page"], "page", "address", [&](const YAML::Node& value) {
      settings.page_address = reader.text(value, "address", "HOST:PORT");
    });
  }
}

}  // namespace

Result<Settings> parse_settings(const std::string& text, const std::string& name) {
  Result<YAML::Node> root = yaml::parse(text, name);
  if (!root) return root.fault();
  Settings settings;
  settings.source = name;
  Reader reader(name);
  try {
    read_root(reader, root.value(), settings);
  } catch (const YAML::Exception& error) {
    reader.fail(error.mark, "this is not what it should be: " + error.msg, "see config/README.md");
  }
  if (reader.fault()) return *reader.fault();
  return settings;
}

Result<Settings> load_settings(const std::string& path) {
  std::ifstream file(path, std::ios::binary);
  if (!file) return Fault{path, "cannot open the settings file", "a readable YAML file"};
  std::ostringstream text;
  text << file.rdbuf();
  if (!file || file.bad())
    return Fault{path, "cannot read the settings file", "a readable YAML file"};
  return parse_settings(text.str(), path);
}

}  // namespace tailweir

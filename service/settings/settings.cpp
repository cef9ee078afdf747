#include "service/settings/settings.h"

#include <algorithm>
#include <cerrno>
#include <cstdio>
#include <cstring>

#include "service/settings/document.h"
#include "service/settings/names.h"
#include "service/settings/panel_settings.h"
#include "service/settings/values.h"

namespace tailweir {
namespace {

constexpr std::size_t kLargestFile = 1'000'000;

bool read_feed(const YamlNode& node, ValueReader& reader, FeedSettings& out) {
  if (!reader.map(node, "feed", {"listen", "subscribe"})) return false;
  if (node.keys.empty()) {
    return reader.fail(node, "feed is empty", "give listen, subscribe or both");
  }
  if (const YamlNode* listen = node.find("listen")) {
    if (!reader.address(*listen, "listen", true, out.listen.emplace())) return false;
  }
  const YamlNode* subscribe = node.find("subscribe");
  if (subscribe == nullptr) return true;
  if (!reader.list(*subscribe, "subscribe")) return false;
  for (const YamlNode& item : subscribe->items) {
    std::string address;
    if (!reader.address(item, "subscribe", false, address)) return false;
    if (std::find(out.subscribe.begin(), out.subscribe.end(), address) != out.subscribe.end()) {
      return reader.fail(item, "address " + quoted(address) + " stands twice", "keep one of them");
    }
    out.subscribe.push_back(address);
  }
  return true;
}

bool read_channel(const YamlNode& node, ValueReader& reader, ChannelSettings& out) {
  if (node.kind == YamlNode::Kind::scalar) return reader.name(node, "a channel", out.name);
  if (!reader.map(node, "a channel", {"name", "enters_as", "step", "unit", "scale"}, {"name"}) ||
      !reader.name(*node.find("name"), "name", out.name)) {
    return false;
  }
  std::size_t word = 0;
  if (const YamlNode* enters = node.find("enters_as")) {
    if (!reader.word(*enters, "enters_as", {"level", "change"}, word)) return false;
    out.enters_as = word == 0 ? EntersAs::level : EntersAs::change;
  }
  if (const YamlNode* step = node.find("step")) {
    const std::vector<std::string> words = {"log_difference", "difference", "relative_difference"};
    if (!reader.word(*step, "step", words, word)) return false;
    const Step steps[] = {Step::log_difference, Step::difference, Step::relative_difference};
    out.step = steps[word];
    if (out.enters_as == EntersAs::change) {
      return reader.fail(*step, "step has no meaning for a channel that enters as a change",
                         "remove it, or write enters_as: level");
    }
  }
  const YamlNode* unit = node.find("unit");
  if (unit != nullptr && !reader.text(*unit, "unit", out.unit)) return false;
  const YamlNode* scale = node.find("scale");
  if (scale == nullptr) return true;
  if (!reader.number(*scale, "scale", out.scale)) return false;
  return out.scale != 0 || reader.fail(*scale, "scale is 0", "write a number other than 0");
}

bool read_channels(const YamlNode& node, ValueReader& reader, Settings& out) {
  if (!reader.list(node, "channels")) return false;
  for (const YamlNode& item : node.items) {
    ChannelSettings channel;
    if (!read_channel(item, reader, channel)) return false;
    for (const ChannelSettings& other : out.channels) {
      if (other.name != channel.name) continue;
      const YamlNode* name = item.find("name");
      return reader.fail(name != nullptr ? *name : item,
                         "channel " + quoted(channel.name) + " stands twice",
                         "give each channel its own name");
    }
    out.channels.push_back(std::move(channel));
  }
  return true;
}

bool read_panels(const YamlNode& node, ValueReader& reader, Settings& out) {
  if (!reader.list(node, "panels")) return false;
  for (const YamlNode& item : node.items) {
    PanelInput panel;
    if (!read_panel(item, out.channels, reader, panel)) return false;
    for (const PanelInput& other : out.panels) {
      if (other.core.name != panel.core.name) continue;
      return reader.fail(*item.find("name"), "panel " + quoted(panel.core.name) + " stands twice",
                         "give each panel its own name");
    }
    out.panels.push_back(std::move(panel));
  }
  return true;
}

// publish and control: one address each.
bool read_address(const YamlNode& node, const std::string& key, ValueReader& reader,
                  std::optional<std::string>& out) {
  if (!reader.map(node, key, {"address"}, {"address"})) return false;
  return reader.address(*node.find("address"), "address", true, out.emplace());
}

bool read_rest(const YamlNode& root, ValueReader& reader, Settings& out) {
  const YamlNode* part = root.find("publish");
  if (part != nullptr && !read_address(*part, "publish", reader, out.publish_address)) return false;
  part = root.find("control");
  if (part != nullptr && !read_address(*part, "control", reader, out.control_address)) return false;
  if (const YamlNode* store = root.find("store")) {
    if (!reader.map(*store, "store", {"directory"}, {"directory"}) ||
        !reader.text(*store->find("directory"), "directory", out.store_directory.emplace())) {
      return false;
    }
  }
  if (const YamlNode* page = root.find("page")) {
    if (!reader.map(*page, "page", {"address"}, {"address"}) ||
        !reader.host_and_port(*page->find("address"), "address", out.page_address.emplace())) {
      return false;
    }
  }
  return true;
}

// No two sockets of the daemon may want the same address.
bool addresses_differ(const YamlNode& root, const Settings& settings, ValueReader& reader) {
  const struct {
    const char* key;
    const std::optional<std::string>& address;
  } bound[] = {{"feed", settings.feed.listen},
               {"publish", settings.publish_address},
               {"control", settings.control_address}};
  for (std::size_t i = 1; i < std::size(bound); ++i) {
    if (!bound[i].address || bound[i].address->find('*') != std::string::npos) continue;
    for (std::size_t j = 0; j < i; ++j) {
      if (bound[j].address != bound[i].address) continue;
      return reader.fail(
          *root.find(bound[i].key)->find("address"),
          "address " + quoted(*bound[i].address) + " is also that of " + bound[j].key,
          "give each its own port");
    }
  }
  return true;
}

bool read_settings(const YamlNode& root, ValueReader& reader, Settings& out) {
  if (!reader.map(root, "the settings",
                  {"feed", "channels", "panels", "publish", "control", "store", "page"},
                  {"channels", "panels"})) {
    return false;
  }
  const YamlNode* feed = root.find("feed");
  if (feed != nullptr && !read_feed(*feed, reader, out.feed)) return false;
  return read_channels(*root.find("channels"), reader, out) &&
         read_panels(*root.find("panels"), reader, out) && read_rest(root, reader, out) &&
         addresses_differ(root, out, reader);
}

}  // namespace

Result<Settings> parse_settings(const std::string& text, const std::string& name) {
  if (text.size() > kLargestFile) {
    return Fault{name, "is larger than 1 MB", "settings are a short YAML file"};
  }
  Result<YamlNode> root = parse_document(text, name);
  if (!root) return root.fault();
  ValueReader reader(name);
  Settings settings;
  settings.source = name;
  if (!read_settings(root.value(), reader, settings)) return *reader.fault();
  return settings;
}

Result<Settings> load_settings(const std::string& path) {
  const auto unreadable = [&path] {
    return Fault{path, std::string("cannot be read: ") + std::strerror(errno),
                 "name a settings file that can be read"};
  };
  std::FILE* file = std::fopen(path.c_str(), "rb");
  if (file == nullptr) return unreadable();
  std::string text(kLargestFile + 1, '\0');
  text.resize(std::fread(text.data(), 1, text.size(), file));
  const bool failed = std::ferror(file) != 0;
  const Fault fault = failed ? unreadable() : Fault{};
  std::fclose(file);
  if (failed) return fault;
  return parse_settings(text, path);
}

std::vector<std::string> not_used(const Settings& settings) {
  std::vector<std::string> keys;
  if (settings.control_address) keys.push_back("control");
  if (settings.store_directory) keys.push_back("store");
  if (settings.page_address) keys.push_back("page");
  for (const PanelInput& panel : settings.panels) {
    if (panel.core.shrinkage.target != ShrinkageTarget::none) {
      keys.push_back("panels." + panel.core.name + ".shrinkage");
    }
  }
  return keys;
}

}  // namespace tailweir

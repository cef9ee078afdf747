#include "service/settings/panel_settings.h"

#include <algorithm>

#include "service/settings/names.h"

namespace tailweir {
namespace {

bool read_channels(const YamlNode& node, const std::vector<ChannelSettings>& channels,
                   ValueReader& reader, PanelInput& out) {
  std::vector<std::string> known;
  for (const ChannelSettings& channel : channels) known.push_back(channel.name);
  if (node.kind == YamlNode::Kind::scalar) {
    std::size_t word = 0;
    if (!reader.word(node, "channels", {"all"}, word)) return false;
    for (std::size_t i = 0; i < known.size(); ++i) out.channels.push_back(i);
    return true;
  }
  if (!reader.list(node, "channels")) return false;
  for (const YamlNode& item : node.items) {
    std::string name;
    if (!reader.name(item, "channels", name)) return false;
    const auto found = std::find(known.begin(), known.end(), name);
    if (found == known.end()) {
      const std::string meant = nearest(name, known);
      return reader.fail(
          item, "unknown channel " + quoted(name),
          meant.empty() ? "name one of the channels above" : "did you mean " + meant + "?");
    }
    const auto index = static_cast<std::size_t>(found - known.begin());
    if (std::find(out.channels.begin(), out.channels.end(), index) != out.channels.end()) {
      return reader.fail(item, "channel " + quoted(name) + " stands twice in the panel",
                         "keep one of them");
    }
    out.channels.push_back(index);
  }
  return true;
}

bool read_centre(const YamlNode& node, ValueReader& reader, PanelSettings& out) {
  if (node.kind == YamlNode::Kind::list) {
    out.centre.kind = CentreKind::given;
    return reader.numbers(node, "centre", out.channels, "channel", out.centre.given);
  }
  std::size_t word = 0;
  if (!reader.word(node, "centre", {"zero", "estimated"}, word)) return false;
  out.centre.kind = word == 0 ? CentreKind::zero : CentreKind::estimated;
  return true;
}

bool read_degrees_of_freedom(const YamlNode& node, ValueReader& reader, NuSettings& out) {
  const std::string key = "degrees_of_freedom";
  if (node.kind == YamlNode::Kind::scalar) {
    if (node.text == "estimated") return true;
    if (node.text.find_first_not_of("+-.0123456789eE") != std::string::npos) {
      const bool meant = !nearest(node.text, {"estimated"}).empty();
      return reader.fail(node, key + " is " + quoted(node.text),
                         meant ? "did you mean estimated?"
                               : "write estimated, a number above 0, or {estimator: ..., ...}");
    }
    out.method = NuMethod::fixed;
    return reader.positive(node, key, out.fixed);
  }
  if (!reader.map(node, key, {"estimator", "floor", "ceiling", "prior_rate"})) return false;
  const std::vector<std::string> words = {"leave_one_out", "likelihood", "pop",
                                          "trace_ratio",   "kurtosis",   "censored"};
  const NuMethod methods[] = {NuMethod::leave_one_out, NuMethod::likelihood, NuMethod::pop,
                              NuMethod::trace_ratio,   NuMethod::kurtosis,   NuMethod::censored};
  if (const YamlNode* estimator = node.find("estimator")) {
    std::size_t word = 0;
    if (!reader.word(*estimator, "estimator", words, word)) return false;
    out.method = methods[word];
  }
  const YamlNode *floor = node.find("floor"), *ceiling = node.find("ceiling");
  if (floor != nullptr && !reader.positive(*floor, "floor", out.floor)) return false;
  if (ceiling != nullptr && !reader.positive(*ceiling, "ceiling", out.ceiling)) return false;
  const YamlNode* rate = node.find("prior_rate");
  if (rate == nullptr) return true;
  if (!reader.number(*rate, "prior_rate", out.prior_rate)) return false;
  return out.prior_rate >= 0 ||
         reader.fail(*rate, "prior_rate is " + rate->text, "write a number from 0 up");
}

bool read_target(const YamlNode& node, ValueReader& reader, PanelSettings& out) {
  if (!reader.list(node, "target")) return false;
  if (static_cast<Index>(node.items.size()) != out.channels) {
    return reader.fail(node, "target has " + std::to_string(node.items.size()) + " rows",
                       "one per channel: " + std::to_string(out.channels));
  }
  out.shrinkage.given.resize(out.channels, out.channels);
  for (Index i = 0; i < out.channels; ++i) {
    Eigen::VectorXd row;
    const YamlNode& item = node.items[static_cast<std::size_t>(i)];
    if (!reader.numbers(item, "a row of target", out.channels, "channel", row)) return false;
    out.shrinkage.given.row(i) = row.transpose();
  }
  for (Index i = 0; i < out.channels; ++i) {
    for (Index j = 0; j < i; ++j) {
      if (out.shrinkage.given(i, j) == out.shrinkage.given(j, i)) continue;
      return reader.fail(node.items[static_cast<std::size_t>(i)].items[static_cast<std::size_t>(j)],
                         "target is not symmetric: row " + std::to_string(i + 1) + ", column " +
                             std::to_string(j + 1),
                         "make both halves equal");
    }
  }
  return true;
}

bool read_shrinkage(const YamlNode& node, ValueReader& reader, PanelSettings& out) {
  if (node.kind == YamlNode::Kind::scalar) {
    std::size_t word = 0;
    return reader.word(node, "shrinkage", {"none"}, word);
  }
  if (!reader.map(node, "shrinkage", {"toward", "intensity", "target"}, {"toward"})) return false;
  const std::vector<std::string> words = {"identity", "diagonal", "constant_correlation", "given"};
  const ShrinkageTarget targets[] = {ShrinkageTarget::identity, ShrinkageTarget::diagonal,
                                     ShrinkageTarget::constant_correlation, ShrinkageTarget::given};
  const YamlNode& toward = *node.find("toward");
  std::size_t word = 0;
  if (!reader.word(toward, "toward", words, word)) return false;
  out.shrinkage.target = targets[word];
  const YamlNode* intensity = node.find("intensity");
  if (intensity != nullptr && intensity->text != "automatic") {
    double value = 0;
    if (!reader.number(*intensity, "intensity", value)) return false;
    if (!(value >= 0 && value <= 1)) {
      return reader.fail(*intensity, "intensity is " + intensity->text,
                         "write automatic or a number from 0 to 1");
    }
    out.shrinkage.intensity = value;
  }
  const YamlNode* target = node.find("target");
  const bool given = out.shrinkage.target == ShrinkageTarget::given;
  if (given && target == nullptr) {
    return reader.fail(toward, "toward: given lacks the key target", "add target: [[...], ...]");
  }
  if (!given && target != nullptr) {
    return reader.fail(*target, "target is only for toward: given", "remove it");
  }
  return target == nullptr || read_target(*target, reader, out);
}

bool read_horizon(const YamlNode& node, ValueReader& reader, HorizonSettings& out) {
  if (!reader.map(node, "a horizon", {"name", "window", "half_life", "tolerance"}, {"name"}) ||
      !reader.name(*node.find("name"), "name", out.name)) {
    return false;
  }
  const YamlNode *window = node.find("window"), *half_life = node.find("half_life");
  if ((window == nullptr) == (half_life == nullptr)) {
    return reader.fail(node,
                       "horizon " + quoted(out.name) + " has " +
                           (window == nullptr ? "no memory" : "a window and a half_life"),
                       "give one of window and half_life");
  }
  bool is_time = false;
  if (window != nullptr) {
    if (!reader.samples_or_time(*window, "window", true, out.memory.length, is_time)) return false;
    out.memory.kind = is_time ? Memory::Kind::window_time : Memory::Kind::window_samples;
  } else {
    if (!reader.samples_or_time(*half_life, "half_life", false, out.memory.length, is_time)) {
      return false;
    }
    out.memory.kind = is_time ? Memory::Kind::half_life_time : Memory::Kind::half_life_samples;
  }
  const YamlNode* tolerance = node.find("tolerance");
  double value = 0;
  if (tolerance == nullptr) return true;
  if (!reader.positive(*tolerance, "tolerance", value)) return false;
  out.tolerance = value;
  return true;
}

bool read_horizons(const YamlNode& node, ValueReader& reader, PanelSettings& out) {
  if (!reader.list(node, "horizons")) return false;
  for (const YamlNode& item : node.items) {
    HorizonSettings horizon;
    if (!read_horizon(item, reader, horizon)) return false;
    for (const HorizonSettings& other : out.horizons) {
      if (other.name != horizon.name) continue;
      return reader.fail(*item.find("name"), "horizon " + quoted(horizon.name) + " stands twice",
                         "give each horizon of a panel its own name");
    }
    out.horizons.push_back(std::move(horizon));
  }
  return true;
}

bool read_share(const YamlNode& node, const std::string& key, ValueReader& reader, double& out) {
  double value = 0;
  if (!reader.number(node, key, value)) return false;
  if (!(value > 0 && value < 1)) {
    return reader.fail(node, key + " is " + node.text,
                       "write a share of the samples between 0 and 1, such as 0.001");
  }
  out = value;
  return true;
}

bool read_flags(const YamlNode& node, ValueReader& reader, FlagSettings& out) {
  if (!reader.map(node, "flags", {"rate", "severe_rate"})) return false;
  const YamlNode *rate = node.find("rate"), *severe = node.find("severe_rate");
  if (rate != nullptr && !read_share(*rate, "rate", reader, out.rate)) return false;
  // One flag in ten is severe unless said otherwise, and never more than the default.
  out.severe_rate = std::min(out.severe_rate, out.rate / 10);
  return severe == nullptr || read_share(*severe, "severe_rate", reader, out.severe_rate);
}

bool read_alerts(const YamlNode& node, ValueReader& reader, AlertRates& out) {
  if (node.text == "none") {
    out.on = false;
    return true;
  }
  if (!reader.map(node, "alerts", {"mean_samples_between_false"})) return false;
  const YamlNode* mean = node.find("mean_samples_between_false");
  if (mean == nullptr) return true;
  double value = 0;
  if (!reader.number(*mean, "mean_samples_between_false", value)) return false;
  if (!(value > 100)) {
    return reader.fail(*mean, "mean_samples_between_false is " + mean->text,
                       "write a number above 100, such as 5000");
  }
  out.mean_samples_between_false = value;
  return true;
}

// The node that a key of core's validate() speaks of, such as "horizons.slow.window"; the deepest
// one there is. Items of a list are met by their name, which may itself contain points.
const YamlNode& node_of(const YamlNode& panel, std::string_view key) {
  const YamlNode* at = &panel;
  const auto starts_with = [&key](std::string_view word) {
    return key.substr(0, word.size()) == word &&
           (key.size() == word.size() || key[word.size()] == '.');
  };
  bool found = true;
  while (found && !key.empty()) {
    found = false;
    for (std::size_t i = 0; i < at->items.size() && !found; ++i) {
      std::string_view word;
      if (at->kind == YamlNode::Kind::map) {
        word = at->keys[i].text;
      } else if (const YamlNode* name = at->items[i].find("name")) {
        word = name->text;
      }
      if (word.empty() || !starts_with(word)) continue;
      at = &at->items[i];
      key.remove_prefix(std::min(key.size(), word.size() + 1));
      found = true;
    }
  }
  return *at;
}

}  // namespace

bool read_panel(const YamlNode& node, const std::vector<ChannelSettings>& channels,
                ValueReader& reader, PanelInput& out) {
  PanelSettings& core = out.core;
  if (!reader.map(node, "a panel",
                  {"name", "channels", "centre", "degrees_of_freedom", "shrinkage", "horizons",
                   "flags", "alerts"},
                  {"name", "channels", "horizons"}) ||
      !reader.name(*node.find("name"), "name", core.name) ||
      !read_channels(*node.find("channels"), channels, reader, out)) {
    return false;
  }
  core.channels = static_cast<Index>(out.channels.size());
  const YamlNode* part = node.find("centre");
  if (part != nullptr && !read_centre(*part, reader, core)) return false;
  part = node.find("degrees_of_freedom");
  if (part != nullptr && !read_degrees_of_freedom(*part, reader, core.nu)) return false;
  part = node.find("shrinkage");
  if (part != nullptr && !read_shrinkage(*part, reader, core)) return false;
  if (!read_horizons(*node.find("horizons"), reader, core)) return false;
  part = node.find("flags");
  if (part != nullptr && !read_flags(*part, reader, core.flags)) return false;
  part = node.find("alerts");
  if (part != nullptr && !read_alerts(*part, reader, out.core.alerts)) return false;
  Result<PanelSettings> checked = validate(core);
  if (!checked) {
    const Fault& fault = checked.fault();
    return reader.fail(node_of(node, fault.where), fault.what, fault.allowed);
  }
  core = std::move(checked.value());
  return true;
}

}  // namespace tailweir

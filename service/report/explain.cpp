#include "service/report/explain.h"

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <set>

namespace tailweir {
namespace {

std::string plain(double value) {
  char text[32];
  const int length = std::snprintf(text, sizeof text, "%.6g", value);
  return std::string(text, static_cast<std::size_t>(length));
}

std::string count_of(double count, const std::string& what) {
  return plain(count) + " " + what + (count == 1 ? "" : "s");
}

// Seconds in the largest unit that keeps them whole: 6h, 90s, 250ms.
std::string time_length_text(double seconds) {
  const std::pair<double, const char*> units[] = {{86400, "d"}, {3600, "h"}, {60, "min"}, {1, "s"}};
  for (const auto& [length, unit] : units) {
    if (std::fmod(seconds, length) == 0) return plain(seconds / length) + unit;
  }
  return plain(seconds * 1e3) + "ms";
}

std::string entry_text(const ChannelSettings& channel) {
  std::string text = channel.enters_as == EntersAs::change ? "change" : "level, ";
  if (channel.enters_as == EntersAs::level) {
    text += channel.step == Step::log_difference ? "log difference"
            : channel.step == Step::difference   ? "difference"
                                                 : "relative difference";
  }
  if (channel.scale != 1) text += ", times " + plain(channel.scale);
  if (!channel.unit.empty()) text += ", in " + channel.unit;
  return text;
}

// Channels by the way they enter: "change: copper, tin, ...".
std::string channels_text(const Settings& settings) {
  constexpr std::size_t kShown = 8;
  std::vector<std::pair<std::string, std::vector<std::string>>> groups;
  for (const ChannelSettings& channel : settings.channels) {
    const std::string way = entry_text(channel);
    auto group = std::find_if(groups.begin(), groups.end(),
                              [&way](const auto& one) { return one.first == way; });
    if (group == groups.end()) group = groups.insert(groups.end(), {way, {}});
    group->second.push_back(channel.name);
  }
  std::string text = count_of(static_cast<double>(settings.channels.size()), "channel") + "\n";
  for (const auto& [way, names] : groups) {
    text += "            as " + way + ":";
    for (std::size_t i = 0; i < std::min(names.size(), kShown); ++i) {
      text += (i == 0 ? " " : ", ") + names[i];
    }
    if (names.size() > kShown) text += " and " + std::to_string(names.size() - kShown) + " more";
    text += "\n";
  }
  return text;
}

std::string nu_text(const NuSettings& nu) {
  if (nu.method == NuMethod::fixed) return "fixed at " + plain(nu.fixed);
  const char* method = nu.method == NuMethod::leave_one_out ? "leave-one-out"
                       : nu.method == NuMethod::likelihood  ? "likelihood"
                       : nu.method == NuMethod::pop         ? "POP"
                       : nu.method == NuMethod::trace_ratio ? "trace ratio"
                       : nu.method == NuMethod::kurtosis    ? "kurtosis"
                                                            : "leave-one-out, censored";
  return std::string("estimated (") + method + "), from " + plain(nu.floor) + " to " +
         plain(nu.ceiling);
}

std::string shrinkage_text(const ShrinkageSettings& shrinkage) {
  const char* target = shrinkage.target == ShrinkageTarget::identity   ? "the identity"
                       : shrinkage.target == ShrinkageTarget::diagonal ? "the diagonal"
                       : shrinkage.target == ShrinkageTarget::constant_correlation
                           ? "constant correlation"
                           : "the given target";
  if (shrinkage.target == ShrinkageTarget::none) return "none";
  return std::string("toward ") + target + ", intensity " +
         (shrinkage.intensity ? plain(*shrinkage.intensity) : "automatic");
}

std::string panel_text(const PanelSettings& panel) {
  const char* centre = panel.centre.kind == CentreKind::zero        ? "zero"
                       : panel.centre.kind == CentreKind::estimated ? "estimated"
                                                                    : "given";
  std::string text = "panel " + panel.name + ": " +
                     count_of(static_cast<double>(panel.channels), "channel") + "\n";
  text += "  centre              " + std::string(centre) + "\n";
  text += "  degrees of freedom  " + nu_text(panel.nu) + "\n";
  text += "  shrinkage           " + shrinkage_text(panel.shrinkage) + "\n";
  text += "  flags               one sample in " + plain(1 / panel.flags.rate) +
          ", severe one in " + plain(1 / panel.flags.severe_rate) + ", when nothing is wrong\n";
  text += panel.alerts.on ? "  alerts              one false in " +
                                plain(panel.alerts.mean_samples_between_false) +
                                " samples of a horizon, all kinds together\n"
                          : "  alerts              none\n";
  for (const HorizonSettings& horizon : panel.horizons) {
    text += "  horizon " + horizon.name + ": " + memory_text(horizon.memory) + "; tolerance " +
            (horizon.tolerance ? plain(*horizon.tolerance) : "a fifth of the statistical error") +
            "\n";
  }
  return text;
}

void add_horizon_cautions(const PanelSettings& panel, const HorizonSettings& horizon,
                          std::vector<std::string>& out) {
  double samples = horizon.memory.length;
  if (horizon.memory.kind == Memory::Kind::half_life_samples) {
    samples = effective_samples(horizon.memory.length);
  } else if (horizon.memory.kind != Memory::Kind::window_samples) {
    return;  // depends on how often samples come
  }
  const double wanted = 5 * static_cast<double>(panel.channels);
  if (!(samples < wanted) || panel.shrinkage.target != ShrinkageTarget::none) return;
  out.push_back("panel " + panel.name + ", horizon " + horizon.name + ": " +
                plain(std::floor(samples)) + " samples for " +
                count_of(static_cast<double>(panel.channels), "channel") +
                " make a noisy scatter; " + plain(wanted) + " or more are better");
}

}  // namespace

double effective_samples(double half_life) {
  const double rate = std::exp2(-1 / half_life);
  return (1 + rate) / (1 - rate);
}

std::string memory_text(const Memory& memory) {
  switch (memory.kind) {
    case Memory::Kind::window_samples:
      return "the last " + count_of(memory.length, "sample");
    case Memory::Kind::window_time:
      return "the last " + time_length_text(memory.length);
    case Memory::Kind::half_life_samples:
      return "half-life " + count_of(memory.length, "sample") + ", as good as " +
             plain(std::round(effective_samples(memory.length))) + " equal ones";
    case Memory::Kind::half_life_time:
      return "half-life " + time_length_text(memory.length);
  }
  return "";
}

std::vector<std::string> cautions(const Settings& settings) {
  std::vector<std::string> out;
  if (!settings.feed.listen && settings.feed.subscribe.empty()) {
    out.push_back("no feed: these settings serve replay only");
  } else if (!settings.publish_address) {
    out.push_back("no publish address: nobody can read the estimates");
  }
  std::set<std::size_t> used;
  for (const PanelInput& panel : settings.panels) {
    used.insert(panel.channels.begin(), panel.channels.end());
    for (const HorizonSettings& horizon : panel.core.horizons) {
      add_horizon_cautions(panel.core, horizon, out);
    }
  }
  for (std::size_t i = 0; i < settings.channels.size(); ++i) {
    if (used.count(i) == 0) {
      out.push_back("channel " + settings.channels[i].name + " is in no panel");
    }
  }
  return out;
}

std::string explain(const Settings& settings) {
  std::string text = settings.source + " is good\n\n";
  text += "feed        ";
  if (settings.feed.listen) text += "acknowledged, at " + *settings.feed.listen;
  for (std::size_t i = 0; i < settings.feed.subscribe.size(); ++i) {
    text += i > 0 || settings.feed.listen ? "\n            plain, from " : "plain, from ";
    text += settings.feed.subscribe[i];
  }
  if (!settings.feed.listen && settings.feed.subscribe.empty()) text += "none";
  text += "\nchannels    " + channels_text(settings);
  text += "publish     " + settings.publish_address.value_or("none") + "\n";
  for (const PanelInput& panel : settings.panels) text += "\n" + panel_text(panel.core);
  const std::vector<std::string> careful = cautions(settings), unused = not_used(settings);
  if (!careful.empty()) text += "\ncaution\n";
  for (const std::string& line : careful) text += "  " + line + "\n";
  if (!unused.empty()) text += "\nnot used by this version\n";
  for (const std::string& key : unused) text += "  " + key + "\n";
  return text;
}

}  // namespace tailweir

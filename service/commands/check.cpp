// tailweir check: validates settings and says in plain words what will run.

#include <cmath>
#include <cstdio>
#include <memory>

#include "service/commands/commands.h"
#include "service/commands/terminal.h"
#include "service/settings/settings.h"

namespace tailweir {
namespace {

std::string join(const std::vector<std::string>& words, std::size_t most) {
  std::string text;
  for (std::size_t k = 0; k < words.size() && k < most; ++k)
    text += (k == 0 ? "" : ", ") + words[k];
  if (words.size() > most) text += ", ... (" + std::to_string(words.size()) + ")";
  return text;
}

std::string time_text(double seconds) {
  if (seconds >= 86400 && std::fmod(seconds, 86400) == 0)
    return short_number(seconds / 86400) + " d";
  if (seconds >= 3600 && std::fmod(seconds, 3600) == 0) return short_number(seconds / 3600) + " h";
  if (seconds >= 60 && std::fmod(seconds, 60) == 0) return short_number(seconds / 60) + " min";
  return short_number(seconds) + " s";
}

std::string memory_text(const Memory& memory) {
  switch (memory.kind) {
    case Memory::Kind::window_samples:
      return "window of " + std::to_string(static_cast<long>(memory.length)) + " samples";
    case Memory::Kind::window_time:
      return "window of " + time_text(memory.length);
    case Memory::Kind::half_life_samples: {
      const double lambda = std::exp2(-1 / memory.length);
      return "half-life of " + short_number(memory.length) + " samples (" +
             short_number((1 + lambda) / (1 - lambda)) + " effective)";
    }
    case Memory::Kind::half_life_time:
      return "half-life of " + time_text(memory.length);
  }
  return "";
}

std::string nu_settings_text(const NuSettings& nu) {
  static const char* const kNames[] = {"fixed",       "leave_one_out", "likelihood", "pop",
                                       "trace_ratio", "kurtosis",      "censored"};
  if (nu.method == NuMethod::fixed) return "fixed at " + short_number(nu.fixed);
  return std::string("estimated (") + kNames[static_cast<int>(nu.method)] + ", from " +
         short_number(nu.floor) + " to " + short_number(nu.ceiling) + ")";
}

void caution(const PanelInput& panel, const HorizonSettings& horizon) {
  const double p = static_cast<double>(panel.core.channels);
  double n = 0;
  if (horizon.memory.kind == Memory::Kind::window_samples) n = horizon.memory.length;
  if (horizon.memory.kind == Memory::Kind::half_life_samples) n = 2.885 * horizon.memory.length;
  if (n > 0 && n < 5 * p) {
    std::printf(
        "      caution: %s effective samples for %ld channels; fewer than five a channel make\n"
        "      every estimate rough\n",
        short_number(n).c_str(), static_cast<long>(panel.core.channels));
  }
}

void describe(const Settings& settings) {
  std::printf("%s is valid. It will run:\n", settings.source.c_str());
  if (settings.feed.listen) {
    std::printf("  intake     acknowledged senders at %s\n", settings.feed.listen->c_str());
  }
  for (const std::string& address : settings.feed.subscribe) {
    std::printf("  intake     plain feed %s (losses are counted)\n", address.c_str());
  }
  if (!settings.feed.listen && settings.feed.subscribe.empty()) {
    std::printf("  intake     none: good for replay only\n");
  }
  if (settings.publish_address) {
    std::printf("  publish    %s\n", settings.publish_address->c_str());
  } else {
    std::printf("  publish    nowhere: add publish: {address: ...} to be heard\n");
  }
  std::vector<std::string> names;
  for (const ChannelSettings& channel : settings.channels) {
    names.push_back(channel.name + (channel.enters_as == EntersAs::level ? " (level)" : ""));
  }
  std::printf("  channels   %s\n", join(names, 8).c_str());
  for (const PanelInput& panel : settings.panels) {
    std::vector<std::string> own;
    for (const std::size_t k : panel.channels) own.push_back(settings.channels[k].name);
    static const char* const kCentres[] = {"zero", "estimated", "given"};
    std::printf(
        "  panel %s\n    channels %s\n    centre %s; degrees of freedom %s\n    flags at rate %s, "
        "severe at %s\n",
        panel.core.name.c_str(), join(own, 8).c_str(),
        kCentres[static_cast<int>(panel.core.centre.kind)], nu_settings_text(panel.core.nu).c_str(),
        short_number(panel.core.flags.rate).c_str(),
        short_number(panel.core.flags.severe_rate).c_str());
    for (const HorizonSettings& horizon : panel.core.horizons) {
      const std::string exact =
          horizon.tolerance ? ", tolerance " + short_number(*horizon.tolerance) : std::string();
      std::printf("    horizon %s: %s%s\n", horizon.name.c_str(),
                  memory_text(horizon.memory).c_str(), exact.c_str());
      caution(panel, horizon);
    }
  }
  const auto unused = [](bool given, const char* key) {
    if (given) std::printf("  note       %s is understood but not used by this version\n", key);
  };
  unused(settings.control_address.has_value(), "control");
  unused(settings.store_directory.has_value(), "store");
  unused(settings.page_address.has_value(), "page");
  for (const PanelInput& panel : settings.panels) {
    if (panel.alerts.given) {
      unused(true, ("alerts of panel " + panel.core.name).c_str());
    }
  }
}

}  // namespace

int run_check(const CheckOptions& options) {
  Result<Settings> settings = load_settings(options.settings);
  if (!settings) return complain(settings.fault(), kBadSettings);
  describe(settings.value());
  return kOk;
}

}  // namespace tailweir

// tailweir demo: sender, daemon and tap in one process over loopback, on the invented Saltmarch.

#include <algorithm>
#include <chrono>
#include <cmath>
#include <cstdio>
#include <memory>
#include <nlohmann/json.hpp>
#include <thread>

#include "service/commands/commands.h"
#include "service/commands/tap_text.h"
#include "service/commands/terminal.h"
#include "service/host/daemon.h"
#include "service/host/log.h"
#include "service/intake/sender.h"
#include "service/outlet/subscriber.h"
#include "service/scenario/saltmarch.h"

namespace tailweir {
namespace {

std::string settings_text(const std::vector<std::string>& channels) {
  std::string text =
      "# The demo's settings. Prices enter as log differences, in basis points.\n"
      "feed: {listen: \"tcp://127.0.0.1:*\"}\n"
      "publish: {address: \"tcp://127.0.0.1:*\"}\n"
      "channels:\n";
  for (const std::string& name : channels) {
    text += "  - {name: " + name +
            ", enters_as: level, step: log_difference, scale: 10000, unit: bp}\n";
  }
  return text +
         "panels:\n"
         "  - name: saltmarch\n"
         "    channels: all\n"
         "    horizons:\n"
         "      - {name: four_hours, window: 240}\n"
         "    flags: {rate: 0.0001, severe_rate: 0.00001}\n"
         "    alerts: {mean_samples_between_false: 20000}\n";
}

// What was seen, for the summary.
struct Seen {
  std::vector<std::string> flags;           // texts
  std::vector<std::uint64_t> flag_samples;  // sequences
  std::vector<std::string> flag_channels;   // first channel of each
  double calm_nu = NAN, calm_low = NAN;     // before the heavy tails
  double late_nu = NAN, late_high = NAN;    // at the end
  std::uint64_t samples = 0, lost = 0;
  std::uint64_t alerts = 0, early_alerts = 0, raised_at = 0, confirmed_at = 0;
  std::uint64_t confirmed_alerts = 0, early_confirmed = 0;
  bool fell = false;
  std::uint64_t fell_at = 0;
};

// Flags that chance may bring in a run without being held against it.
constexpr std::size_t kByChance = 1;
// Sample whose estimate stands for the calm: long before anything is planted.
constexpr std::uint64_t kReference = 1500;
// Samples between two printed estimate lines.
constexpr std::uint64_t kShown = 40;

class Demo {
 public:
  explicit Demo(const DemoOptions& options)
      : options_(options), scenario_(options.seed, !options.calm), colour_(wants_colour()) {}

  int run() {
    const std::string text = settings_text(scenario_.channels());
    if (options_.show_settings) {
      std::fputs(text.c_str(), stdout);
      return kOk;
    }
    Result<Settings> settings = parse_settings(text, "demo settings");
    if (!settings) return complain(settings.fault(), kInternal);
    log::start(true);
    Daemon daemon;
    Result<bool> started = daemon.start(settings.value());
    if (!started) return complain(started.fault(), kUnavailable);
    Subscriber subscriber(daemon.publish_address(), "");
    Result<bool> opened = subscriber.open();
    if (!opened) return complain(opened.fault(), kUnavailable);
    if (!await_description(subscriber)) {
      return complain({"demo", "the daemon does not answer", ""}, kUnavailable);
    }
    introduce(daemon);
    Sender sender(daemon.intake_address(), "saltmarch", scenario_.channels(), {});
    Result<std::uint64_t> connected = sender.connect();
    if (!connected) return complain(connected.fault(), kUnavailable);
    if (!play(sender, subscriber)) return kUnavailable;
    daemon.stop();
    return summarise();
  }

 private:
  bool await_description(Subscriber& subscriber) {
    const auto end = std::chrono::steady_clock::now() + std::chrono::seconds(5);
    while (subscriber.panels().empty() && std::chrono::steady_clock::now() < end) {
      subscriber.next(std::chrono::milliseconds(50));
    }
    return !subscriber.panels().empty();
  }

  void introduce(const Daemon& daemon) const {
    std::printf(
        "Saltmarch, an invented exchange: 12 contracts, a price a minute, seed %llu%s.\n"
        "A sender plays them to a daemon at %s; what it publishes is below.\n"
        "nu: degrees of freedom with its 95%% interval (small: heavy tails); scale: typical change "
        "in\n"
        "basis points; FLAG: a sample that is not like the others, with the contracts to look "
        "at.\n\n",
        static_cast<unsigned long long>(options_.seed), options_.calm ? ", nothing planted" : "",
        daemon.intake_address().c_str());
  }

  bool play(Sender& sender, Subscriber& subscriber) {
    const auto pace = std::chrono::microseconds(options_.quick ? 0 : 13000);
    auto due = std::chrono::steady_clock::now();
    std::int64_t time_ns = 0;
    std::vector<double> prices;
    for (std::uint64_t k = 1; k <= scenario_.length(); ++k) {
      if (pace.count() > 0) {
        std::this_thread::sleep_until(due);
        due += pace;
      }
      scenario_.next(time_ns, prices);
      Result<bool> sent = sender.send(time_ns, prices);
      if (sent) sent = sender.flush();
      if (!sent) {
        complain(sent.fault(), kUnavailable);
        return false;
      }
      // The first price has no change yet; every other sample gives one estimate.
      while (k > 1 && seen_.samples < k) {
        const std::optional<Subscriber::Message> message =
            subscriber.next(std::chrono::milliseconds(2000));
        if (!message) {
          complain({"demo", "the daemon published nothing for two seconds", ""}, kUnavailable);
          return false;
        }
        take(*message, subscriber);
      }
    }
    while (const auto message = subscriber.next(std::chrono::milliseconds(50)))
      take(*message, subscriber);
    seen_.lost = subscriber.lost();
    return true;
  }

  void take(const Subscriber::Message& message, const Subscriber& subscriber) {
    if (const auto* estimate = std::get_if<EstimateRecord>(&message.content)) {
      take_estimate(*estimate, subscriber);
    } else if (const auto* alert = std::get_if<Subscriber::AlertLine>(&message.content)) {
      take_alert(*alert, message.header.sequence);
    } else if (const auto* flag = std::get_if<Subscriber::FlagLine>(&message.content)) {
      const std::string text = flag_text(flag->json);
      std::printf(colour_ ? "\033[1m%s\033[0m\n" : "%s\n", text.c_str());
      std::fflush(stdout);
      seen_.flags.push_back(text);
      seen_.flag_samples.push_back(message.header.sequence);
      const nlohmann::json json = nlohmann::json::parse(flag->json, nullptr, false);
      seen_.flag_channels.push_back(json.is_object() && !json["channels"].empty()
                                        ? json["channels"][0].value("name", "")
                                        : "");
    }
  }

  void take_alert(const Subscriber::AlertLine& alert, std::uint64_t sequence) {
    const std::string text = alert_text(alert.json);
    std::printf(colour_ ? "\033[1m%s\033[0m\n" : "%s\n", text.c_str());
    std::fflush(stdout);
    const nlohmann::json json = nlohmann::json::parse(alert.json, nullptr, false);
    if (!json.is_object()) return;
    const std::string stage = json.value("stage", "");
    const bool early = sequence < scenario_.planted().heavy_from;
    if (stage == "raised") {
      ++seen_.alerts;
      if (early) ++seen_.early_alerts;
    }
    if (stage == "confirmed") {
      ++seen_.confirmed_alerts;
      if (early) ++seen_.early_confirmed;
    }
    if (json.value("kind", "") != "tail" || json.value("direction", "") != "heavier") return;
    if (stage == "raised" && seen_.raised_at == 0) seen_.raised_at = sequence;
    if (stage == "confirmed") seen_.confirmed_at = sequence;
  }

  void take_estimate(const EstimateRecord& record, const Subscriber& subscriber) {
    seen_.samples = record.sequence;
    if (record.sequence % kShown == 0) {
      std::puts(estimate_text(record, subscriber.panels()).c_str());
      std::fflush(stdout);
    }
    const Estimate& e = record.estimate;
    if (e.state != HorizonState::live) return;
    if (record.sequence == kReference) {
      seen_.calm_nu = e.nu;
      seen_.calm_low = e.nu_low;
    }
    seen_.late_nu = e.nu;
    seen_.late_high = e.nu_high;
    if (!seen_.fell && record.sequence > kReference && e.nu_high < seen_.calm_low) {
      seen_.fell = true;
      seen_.fell_at = record.sequence;
      std::printf(
          "          nu is down to %s, its whole interval now below the one around %s before\n",
          short_number(e.nu).c_str(), short_number(seen_.calm_nu).c_str());
    }
  }

  // Flags and raises come at a known rate when nothing is wrong: 0.25 flags and 0.1 alerts a run.
  static std::string chance_text(std::size_t flags, std::uint64_t alerts) {
    if (flags + alerts == 0) return "no flag, no alert";
    return std::to_string(flags) + " flags and " + std::to_string(alerts) +
           " unconfirmed alerts, as happens by chance";
  }

  int summarise() const {
    const SaltmarchEvents& planted = scenario_.planted();
    std::printf("\n%llu samples, %zu flags, nu %s while calm and %s at the end.\n",
                static_cast<unsigned long long>(seen_.samples), seen_.flags.size(),
                short_number(seen_.calm_nu).c_str(), short_number(seen_.late_nu).c_str());
    bool good = seen_.samples == scenario_.length() && seen_.lost == 0;
    const auto verdict = [&good](bool ok, const std::string& text) {
      std::printf("  %s  %s\n", ok ? "seen   " : "MISSED ", text.c_str());
      good = good && ok;
    };
    if (options_.calm) {
      verdict(seen_.flags.size() <= kByChance && seen_.confirmed_alerts == 0,
              "nothing planted: " + chance_text(seen_.flags.size(), seen_.alerts));
      verdict(!seen_.fell, "tails stayed as they were");
      return good ? kOk : kInternal;
    }
    const std::string& name = scenario_.channels()[planted.mistyped_channel];
    bool mistyped = false;
    std::size_t early = 0;
    for (std::size_t k = 0; k < seen_.flags.size(); ++k) {
      mistyped |= seen_.flag_samples[k] == planted.mistyped_at && seen_.flag_channels[k] == name;
      early += seen_.flag_samples[k] < planted.mistyped_at;
    }
    verdict(early <= kByChance && seen_.early_confirmed == 0,
            "calm: " + chance_text(early, seen_.early_alerts) + " before anything was planted");
    verdict(mistyped,
            "mistyped price of " + name + " at sample " + std::to_string(planted.mistyped_at));
    verdict(seen_.fell && seen_.fell_at >= planted.heavy_from,
            "heavier tails from sample " + std::to_string(planted.heavy_from) + " on" +
                (seen_.fell ? ", nu's interval had moved away by " + std::to_string(seen_.fell_at)
                            : ""));
    verdict(seen_.raised_at >= planted.heavy_from && seen_.confirmed_at > seen_.raised_at,
            "alert: heavier tails, raised at " + std::to_string(seen_.raised_at) +
                ", confirmed at " + std::to_string(seen_.confirmed_at));
    std::printf(
        "  planted, no detector for it in this version: %s stands still, samples %llu to %llu\n",
        scenario_.channels()[planted.stale_channel].c_str(),
        static_cast<unsigned long long>(planted.stale_from),
        static_cast<unsigned long long>(planted.stale_to - 1));
    return good ? kOk : kInternal;
  }

  DemoOptions options_;
  SaltmarchScenario scenario_;
  bool colour_;
  Seen seen_;
};

}  // namespace

int run_demo(const DemoOptions& options) { return Demo(options).run(); }

}  // namespace tailweir

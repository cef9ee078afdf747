// tailweir tap: prints what a daemon publishes, readable or as JSON lines.

#include <csignal>
#include <cstdio>
#include <memory>

#include "service/commands/commands.h"
#include "service/commands/tap_text.h"
#include "service/commands/terminal.h"
#include "service/outlet/subscriber.h"
#include "service/report/record_lines.h"

namespace tailweir {
namespace {

volatile std::sig_atomic_t stopped = 0;
void stop(int) { stopped = 1; }

MatricesPolicy policy_of(const std::string& word) {
  MatricesPolicy policy;
  if (word == "never") policy.kind = MatricesPolicy::Kind::never;
  if (word == "flagged") policy.kind = MatricesPolicy::Kind::flagged;
  return policy;
}

class Tap {
 public:
  explicit Tap(const TapOptions& options) : options_(options), colour_(wants_colour()) {}

  // Prints one message; true when a record was printed.
  bool print(const Subscriber::Message& message, const Subscriber& subscriber) {
    if (const auto* panels = std::get_if<std::vector<PanelDescription>>(&message.content)) {
      lines_ = std::make_unique<RecordLines>(*panels, policy_of(options_.matrices));
      if (options_.json) {
        std::fprintf(stderr, "tailweir: connected to %s\n", options_.address.c_str());
      } else {
        describe(*panels);
      }
      return false;
    }
    if (const auto* estimate = std::get_if<EstimateRecord>(&message.content)) {
      const std::string line =
          options_.json ? lines_->line(*estimate) : estimate_text(*estimate, subscriber.panels());
      std::puts(line.c_str());
      return true;
    }
    if (const auto* flag = std::get_if<Subscriber::FlagLine>(&message.content)) {
      if (options_.json) {
        std::puts(flag->json.c_str());
      } else {
        const std::string text = flag_text(flag->json);
        std::printf(colour_ ? "\033[1m%s\033[0m\n" : "%s\n", text.c_str());
      }
      return true;
    }
    if (const auto* alert = std::get_if<Subscriber::AlertLine>(&message.content)) {
      const std::string text = options_.json ? alert->json : alert_text(alert->json);
      std::printf(colour_ && !options_.json ? "\033[1m%s\033[0m\n" : "%s\n", text.c_str());
      return true;
    }
    return false;
  }

 private:
  void describe(const std::vector<PanelDescription>& panels) {
    for (const PanelDescription& panel : panels) {
      std::string names;
      for (const std::string& name : panel.channels) names += " " + name;
      std::printf("panel %s:%s\n", panel.name.c_str(), names.c_str());
    }
  }

  const TapOptions& options_;
  bool colour_;
  std::unique_ptr<RecordLines> lines_;
};

}  // namespace

int run_tap(const TapOptions& options) {
  Subscriber subscriber(options.address, options.topic);
  Result<bool> opened = subscriber.open();
  if (!opened) return complain(opened.fault(), kUnavailable);
  std::signal(SIGINT, stop);
  std::signal(SIGTERM, stop);
  Tap tap(options);
  std::uint64_t printed = 0, lost = 0;
  auto quiet_since = std::chrono::steady_clock::now();
  while (stopped == 0 && (options.count == 0 || printed < options.count)) {
    const std::optional<Subscriber::Message> message =
        subscriber.next(std::chrono::milliseconds(100));
    const auto now = std::chrono::steady_clock::now();
    if (message) {
      quiet_since = now;
      if (tap.print(*message, subscriber)) ++printed;
    } else {
      std::fflush(stdout);
      if (options.patience > 0 &&
          std::chrono::duration<double>(now - quiet_since).count() > options.patience) {
        std::fflush(stdout);
        return complain(
            {options.address, "nothing came for " + short_number(options.patience) + " s",
             "a running daemon that publishes there"},
            kUnavailable);
      }
    }
    if (subscriber.lost() > lost) {
      std::fprintf(stderr, "tailweir: %llu messages were lost on the way\n",
                   static_cast<unsigned long long>(subscriber.lost() - lost));
      lost = subscriber.lost();
    }
  }
  std::fflush(stdout);
  return kOk;
}

}  // namespace tailweir

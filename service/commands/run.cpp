// tailweir run: the daemon in the foreground, until SIGINT or SIGTERM.

#include <csignal>
#include <cstdio>
#include <memory>

#include "service/commands/commands.h"
#include "service/commands/terminal.h"
#include "service/host/daemon.h"
#include "service/host/log.h"

namespace tailweir {
namespace {

int run_daemon(const std::string& path, bool quiet) {
  Result<Settings> settings = load_settings(path);
  if (!settings) return complain(settings.fault(), kBadSettings);
  if (!settings.value().feed.listen && settings.value().feed.subscribe.empty()) {
    return complain({path, "there is no feed to run on", "feed: {listen: ADDRESS}"}, kBadSettings);
  }
  // Blocked before any thread starts, so that all inherit it and only sigwait sees them.
  sigset_t stops;
  sigemptyset(&stops);
  sigaddset(&stops, SIGINT);
  sigaddset(&stops, SIGTERM);
  pthread_sigmask(SIG_BLOCK, &stops, nullptr);
  log::start(quiet);
  Daemon daemon;
  Result<bool> started = daemon.start(settings.value());
  if (!started) return complain(started.fault(), kUnavailable);
  if (!daemon.intake_address().empty()) {
    log::line(log::Level::info, "listening for senders at " + daemon.intake_address());
  }
  if (!daemon.publish_address().empty()) {
    log::line(log::Level::info, "publishing at " + daemon.publish_address());
  }
  int signal = 0;
  sigwait(&stops, &signal);
  const std::uint64_t accepted = daemon.accepted();
  daemon.stop();
  log::line(log::Level::info, std::string(signal == SIGINT ? "SIGINT" : "SIGTERM") +
                                  ": stopped after " + std::to_string(accepted) + " samples");
  return kOk;
}

}  // namespace

int run_run(const RunOptions& options) { return run_daemon(options.settings, options.quiet); }

}  // namespace tailweir

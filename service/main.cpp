// Command line only: parses the arguments and calls one function per command.

#include <CLI/CLI.hpp>
#include <cstdio>
#include <exception>

#include "service/commands/commands.h"

namespace {

using namespace tailweir;

void add_settings(CLI::App* command, std::string& path) {
  command->add_option("SETTINGS", path, "settings file (YAML)")->required();
}

void add_run(CLI::App& program, RunOptions& options) {
  CLI::App* command = program.add_subcommand("run", "Run the daemon in the foreground");
  add_settings(command, options.settings);
  command->add_flag("--quiet", options.quiet, "log warnings and errors only");
}

void add_check(CLI::App& program, CheckOptions& options) {
  CLI::App* command = program.add_subcommand(
      "check", "Validate settings and print what will run, or FILE:LINE:COLUMN and the cure");
  add_settings(command, options.settings);
}

void add_replay(CLI::App& program, ReplayOptions& options) {
  CLI::App* command = program.add_subcommand(
      "replay", "Run the same engine over a recording and write its records");
  add_settings(command, options.settings);
  command->add_option("--from", options.recording, "recording (CSV), - for standard input")
      ->required();
  command->add_option("--into", options.directory, "directory for the records and the report")
      ->required();
  command
      ->add_option("--matrices", options.matrices,
                   "which estimates carry centre and scatter: every, N, flagged, never")
      ->capture_default_str();
  command->add_flag("--keep-going", options.keep_going,
                    "count refused samples instead of stopping");
  command->add_flag("--overwrite", options.overwrite, "write into a directory that is not empty");
}

void add_send(CLI::App& program, SendOptions& options) {
  CLI::App* command = program.add_subcommand("send", "Play samples into a daemon, acknowledged");
  command->add_option("ADDRESS", options.address, "the daemon's feed.listen, tcp://HOST:PORT")
      ->required();
  command->add_option("--from", options.recording, "recording (CSV), - for standard input");
  command->add_option("--invent", options.invent, "invented samples instead: saltmarch");
  command->add_option("--seed", options.seed, "seed of the invented samples")
      ->capture_default_str();
  command->add_option("--samples", options.samples, "how many invented samples");
  command->add_option("--every", options.every, "pace: one sample each 100ms, 2s, 500us");
  command->add_option("--name", options.name, "name of this sender")->capture_default_str();
  command->add_flag("--keep-going", options.keep_going, "go on after a refused sample");
}

void add_tap(CLI::App& program, TapOptions& options) {
  CLI::App* command = program.add_subcommand("tap", "Print what a daemon publishes");
  command->add_option("ADDRESS", options.address, "the daemon's publish.address, tcp://HOST:PORT")
      ->required();
  command->add_flag("--json", options.json, "JSON lines, the same as replay writes");
  command->add_option("--topic", options.topic,
                      "prefix such as estimate/metals/slow or flag/metals");
  command
      ->add_option("--matrices", options.matrices,
                   "estimates with centre and scatter: every, flagged, never")
      ->check(CLI::IsMember({"every", "flagged", "never"}))
      ->capture_default_str();
  command->add_option("--count", options.count, "stop after this many records");
  command->add_option("--patience", options.patience, "give up after this many quiet seconds");
}

void add_demo(CLI::App& program, DemoOptions& options) {
  CLI::App* command = program.add_subcommand(
      "demo", "See it work: sender, daemon and tap in one process on invented prices");
  command->add_option("--seed", options.seed, "seed of the invented prices")->capture_default_str();
  command->add_flag("--calm", options.calm,
                    "control run: nothing planted, nothing should be reported");
  command->add_flag("--quick", options.quick, "as fast as it goes instead of half a minute");
  command->add_flag("--show-settings", options.show_settings,
                    "print the embedded settings and stop");
}

int parse_and_run(int argc, char** argv) {
  CLI::App program(
      "Keeps multivariate-t scatter and degrees of freedom of a live stream current, and flags "
      "what does not fit.",
      "tailweir");
  program.set_version_flag("--version", "tailweir " TAILWEIR_VERSION);
  program.require_subcommand(1);
  program.footer("tailweir COMMAND --help tells more. Start with: tailweir demo");
  RunOptions run;
  CheckOptions check;
  ReplayOptions replay;
  SendOptions send;
  TapOptions tap;
  DemoOptions demo;
  add_run(program, run);
  add_check(program, check);
  add_replay(program, replay);
  add_send(program, send);
  add_tap(program, tap);
  add_demo(program, demo);
  try {
    program.parse(argc, argv);
  } catch (const CLI::ParseError& error) {
    if (error.get_exit_code() == 0) return program.exit(error);  // --help, --version
    std::fprintf(stderr, "tailweir: %s; see tailweir --help\n", error.what());
    return kUsage;
  }
  if (program.got_subcommand("run")) return run_run(run);
  if (program.got_subcommand("check")) return run_check(check);
  if (program.got_subcommand("replay")) return run_replay(replay);
  if (program.got_subcommand("send")) return run_send(send);
  if (program.got_subcommand("tap")) return run_tap(tap);
  return run_demo(demo);
}

}  // namespace

int main(int argc, char** argv) {
  try {
    return parse_and_run(argc, argv);
  } catch (const std::exception& error) {
    std::fprintf(stderr, "tailweir: internal error: %s\n", error.what());
    return tailweir::kInternal;
  }
}

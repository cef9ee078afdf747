// The commands of the program: each file of this folder registers one subcommand and runs it.
//
// A command reports its outcome as a sysexits.h code through `exit_code`; errors go to standard
// error in one line that says what to do. CLI11 is included by the .cpp files only. Thread rule:
// called from main() only.
#pragma once

namespace CLI {
class App;
}

namespace tailweir {

// Exit codes of sysexits.h that the program uses.
enum ExitCode {
  kOk = 0,
  kUsage = 64,
  kBadData = 65,
  kUnavailable = 69,
  kInternal = 70,
  kIoError = 74,
  kBadSettings = 78
};

void add_run_command(CLI::App& program, int& exit_code);
void add_check_command(CLI::App& program, int& exit_code);
void add_replay_command(CLI::App& program, int& exit_code);
void add_send_command(CLI::App& program, int& exit_code);
void add_tap_command(CLI::App& program, int& exit_code);
void add_demo_command(CLI::App& program, int& exit_code);

}  // namespace tailweir

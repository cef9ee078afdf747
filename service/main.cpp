// Command line only: parses the arguments and calls one function per command.

#include <CLI/CLI.hpp>
#include <cstdio>
#include <exception>

#include "service/commands/commands.h"

int main(int argc, char** argv) {
  int exit_code = tailweir::kOk;
  try {
    CLI::App program(
        "Keeps multivariate-t scatter and degrees of freedom of a live stream current, and flags "
        "what does not fit.",
        "tailweir");
    program.set_version_flag("--version", "tailweir " TAILWEIR_VERSION);
    program.require_subcommand(1);
    tailweir::add_check_command(program, exit_code);
    tailweir::add_replay_command(program, exit_code);
    try {
      program.parse(argc, argv);
    } catch (const CLI::ParseError& error) {
      return program.exit(error) == 0 ? tailweir::kOk : tailweir::kUsage;
    }
  } catch (const std::exception& error) {
    std::fprintf(stderr, "tailweir: internal error: %s\n", error.what());
    return tailweir::kInternal;
  }
  return exit_code;
}

// tailweir check SETTINGS: validates settings and says in plain words what will run.
#include <CLI/CLI.hpp>
#include <cstdio>
#include <memory>

#include "service/commands/commands.h"
#include "service/report/explain.h"
#include "service/settings/settings.h"

namespace tailweir {
namespace {

int check(const std::string& path) {
  const Result<Settings> settings = load_settings(path);
  if (!settings) {
    std::fprintf(stderr, "%s\n", settings.fault().line().c_str());
    return kBadSettings;
  }
  const std::string text = explain(settings.value());
  const bool written = std::fwrite(text.data(), 1, text.size(), stdout) == text.size();
  if (written && std::fflush(stdout) == 0) return kOk;
  std::fprintf(stderr, "standard output: cannot be written; free some space\n");
  return kIoError;
}

}  // namespace

void add_check_command(CLI::App& program, int& exit_code) {
  CLI::App* command = program.add_subcommand(
      "check", "Validates a settings file and says what will run, or what is wrong and where.");
  const auto path = std::make_shared<std::string>();
  command->add_option("SETTINGS", *path, "settings file (YAML)")->required();
  command->callback([path, &exit_code] { exit_code = check(*path); });
}

}  // namespace tailweir

// tailweir check: validates settings and says in plain words what will run.

#include <cstdio>

#include "service/commands/commands.h"
#include "service/commands/terminal.h"
#include "service/report/explain.h"
#include "service/settings/settings.h"

namespace tailweir {

int run_check(const CheckOptions& options) {
  const Result<Settings> settings = load_settings(options.settings);
  if (!settings) return complain(settings.fault(), kBadSettings);
  const std::string text = explain(settings.value());
  const bool written = std::fwrite(text.data(), 1, text.size(), stdout) == text.size();
  if (written && std::fflush(stdout) == 0) return kOk;
  return complain({"standard output", "cannot be written", "room for a page of text"}, kIoError);
}

}  // namespace tailweir

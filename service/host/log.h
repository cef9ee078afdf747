// Log lines of the daemon: to standard error, one line an event. The only home of spdlog. Thread
// rule: safe from several threads.
#pragma once

#include <string>

namespace tailweir::log {

enum class Level { info, warning, error };

// quiet: warnings and errors only. colour: only when standard error is a terminal and NO_COLOR is
// not set; decided here.
void start(bool quiet);
void line(Level level, const std::string& text);

}  // namespace tailweir::log

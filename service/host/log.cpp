#include "service/host/log.h"

#include <spdlog/sinks/stdout_color_sinks.h>
#include <spdlog/spdlog.h>
#include <unistd.h>

#include <cstdlib>

namespace tailweir::log {

void start(bool quiet) {
  const bool colour = isatty(STDERR_FILENO) == 1 && std::getenv("NO_COLOR") == nullptr;
  auto sink = std::make_shared<spdlog::sinks::stderr_color_sink_mt>(
      colour ? spdlog::color_mode::always : spdlog::color_mode::never);
  auto logger = std::make_shared<spdlog::logger>("tailweir", sink);
  logger->set_pattern("%Y-%m-%dT%H:%M:%S.%e%z %^%l%$ %v");
  logger->set_level(quiet ? spdlog::level::warn : spdlog::level::info);
  logger->flush_on(spdlog::level::info);
  spdlog::set_default_logger(logger);
}

void line(Level level, const std::string& text) {
  switch (level) {
    case Level::info:
      spdlog::info("{}", text);
      break;
    case Level::warning:
      spdlog::warn("{}", text);
      break;
    case Level::error:
      spdlog::error("{}", text);
      break;
  }
}

}  // namespace tailweir::log

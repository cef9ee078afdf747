#include "service/commands/terminal.h"

#include <unistd.h>

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <cstdlib>

namespace tailweir {

Progress::Progress(std::string what)
    : what_(std::move(what)), terminal_(isatty(STDERR_FILENO) == 1) {}

Progress::~Progress() {
  if (drawn_) std::fputs("\r\033[K", stderr);
}

void Progress::show(std::uint64_t done, std::uint64_t total, const std::string& note) {
  if (!terminal_) return;
  const auto now = std::chrono::steady_clock::now();
  if (drawn_ && now < next_) return;
  next_ = now + std::chrono::milliseconds(100);
  drawn_ = true;
  constexpr int kWidth = 30;
  std::string bar;
  if (total > 0) {
    const double share = std::min(1., static_cast<double>(done) / static_cast<double>(total));
    const int filled = static_cast<int>(share * kWidth);
    bar = " [" + std::string(static_cast<std::size_t>(filled), '=') +
          std::string(static_cast<std::size_t>(kWidth - filled), '.') + "] " +
          std::to_string(static_cast<int>(100 * share)) + "%";
  }
  std::fprintf(stderr, "\r\033[K%s%s  %s", what_.c_str(), bar.c_str(), note.c_str());
  std::fflush(stderr);
}

int complain(const Fault& fault, int code) {
  std::fprintf(stderr, "tailweir: %s\n", fault.line().c_str());
  return code;
}

bool wants_colour() { return isatty(STDOUT_FILENO) == 1 && std::getenv("NO_COLOR") == nullptr; }

std::string short_number(double value) {
  if (std::isnan(value)) return "-";
  char text[32];
  std::snprintf(text, sizeof text, "%.3g", value);
  return text;
}

std::string nu_text(double nu, double low, double high, const std::string& status) {
  if (std::isnan(nu)) return "-";
  if (status == "fixed") return short_number(nu) + " (fixed)";
  if (status == "at_ceiling") return short_number(nu) + " (ceiling: no heavy tail seen)";
  const std::string range = " [" + short_number(low) + ", " + short_number(high) + "]";
  if (status == "not_identified") return short_number(nu) + range + " not identified";
  return short_number(nu) + range;
}

}  // namespace tailweir

#include "service/commands/progress.h"

#include <unistd.h>

#include <algorithm>
#include <cstdio>

namespace tailweir {

ProgressBar::ProgressBar(std::string label, std::uint64_t total)
    : label_(std::move(label)), total_(total), terminal_(isatty(STDERR_FILENO) == 1) {}

ProgressBar::~ProgressBar() { wipe(); }

void ProgressBar::show(std::uint64_t done, std::uint64_t samples) {
  constexpr int kWidth = 40;
  if (!terminal_ || (calls_++ & 15U) != 0) return;
  const auto now = std::chrono::steady_clock::now();
  if (now < next_) return;
  next_ = now + std::chrono::milliseconds(100);
  drawn_ = true;
  const auto count = static_cast<unsigned long long>(samples);
  if (total_ == 0) {
    std::fprintf(stderr, "\r%s  %llu samples", label_.c_str(), count);
    return;
  }
  const double share = std::min(1., static_cast<double>(done) / static_cast<double>(total_));
  const int filled = static_cast<int>(share * kWidth);
  std::fprintf(stderr, "\r%s  [%s%s] %3.0f%%  %llu samples", label_.c_str(),
               std::string(static_cast<std::size_t>(filled), '#').c_str(),
               std::string(static_cast<std::size_t>(kWidth - filled), '.').c_str(), 100 * share,
               count);
}

void ProgressBar::wipe() {
  if (drawn_) std::fprintf(stderr, "\r%100s\r", "");
  drawn_ = false;
}

}  // namespace tailweir

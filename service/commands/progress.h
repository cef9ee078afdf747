// A progress bar on standard error, drawn only when that is a terminal.
//
// Thread rule: one owner. Reads the steady clock to draw at most ten times a second.
#pragma once

#include <chrono>
#include <cstdint>
#include <string>

namespace tailweir {

class ProgressBar {
 public:
  // `label` stands before the bar. total: units of done; 0 when unknown (a count is shown instead).
  ProgressBar(std::string label, std::uint64_t total);
  // Wipes the line.
  ~ProgressBar();
  ProgressBar(const ProgressBar&) = delete;
  ProgressBar& operator=(const ProgressBar&) = delete;

  // Cheap enough to call for every sample.
  void show(std::uint64_t done, std::uint64_t samples);
  // Removes the bar, so that a message can take its line.
  void wipe();

 private:
  std::string label_;
  std::uint64_t total_;
  bool terminal_;
  bool drawn_ = false;
  std::uint32_t calls_ = 0;
  std::chrono::steady_clock::time_point next_;
};

}  // namespace tailweir

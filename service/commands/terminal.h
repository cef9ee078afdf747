// What commands show people: a progress bar on a terminal, plain lines elsewhere, one error line.
#pragma once

#include <chrono>
#include <cstdint>
#include <string>

#include "core/result.h"

namespace tailweir {

// A bar on standard error while it is a terminal; nothing when piped. Redrawn at most 10 times a
// second.
class Progress {
 public:
  explicit Progress(std::string what);
  ~Progress();  // clears the bar
  // done of total (0: unknown); note stands behind the bar.
  void show(std::uint64_t done, std::uint64_t total, const std::string& note);

 private:
  std::string what_;
  bool terminal_;
  bool drawn_ = false;
  std::chrono::steady_clock::time_point next_{};
};

// Prints "tailweir: FAULT" on standard error and returns the code.
int complain(const Fault& fault, int code);

// True when standard output is a terminal and NO_COLOR is not set.
bool wants_colour();

// Text for a number that people read: three significant digits.
std::string short_number(double value);

// "4.3 [3.1, 6.0]", or what the status says in words.
std::string nu_text(double nu, double low, double high, const std::string& status);

}  // namespace tailweir

// The commands of the program, one file each: options in, sysexits.h code out.
//
// main.cpp parses the command line into these options; a command does its work, reports an error as
// one line on standard error that says what to do, and returns its code. Thread rule: called from
// main() only.
#pragma once

#include <cstdint>
#include <string>

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

struct RunOptions {
  std::string settings;
  bool quiet = false;
};
int run_run(const RunOptions& options);

struct CheckOptions {
  std::string settings;
};
int run_check(const CheckOptions& options);

struct ReplayOptions {
  std::string settings, recording, directory;
  std::string matrices = "flagged";  // every, N, flagged, never
  bool keep_going = false, overwrite = false;
};
int run_replay(const ReplayOptions& options);

struct SendOptions {
  std::string address;
  std::string recording;  // or
  std::string invent;     // saltmarch
  std::string name = "send";
  std::string every;  // pace, empty: as fast as it goes
  std::uint64_t seed = 1, samples = 0;
  bool keep_going = false;
};
int run_send(const SendOptions& options);

struct TapOptions {
  std::string address, topic;
  std::string matrices = "every";
  bool json = false;
  std::uint64_t count = 0;  // records to print, 0: no end
  double patience = 0;      // quiet seconds to bear, 0: no end
};
int run_tap(const TapOptions& options);

struct DemoOptions {
  std::uint64_t seed = 1;
  bool calm = false, quick = false, show_settings = false;
};
int run_demo(const DemoOptions& options);

}  // namespace tailweir

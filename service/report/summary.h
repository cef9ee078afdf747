// The plain summary of a run: what came in, what the horizons ended with, what stood out.
//
// Collects from the engine's records and renders report.txt. Nothing of it depends on the machine
// or the hour: the same recording gives the same text. Thread rule: one owner. No I/O.
#pragma once

#include <cstdint>
#include <string>
#include <vector>

#include "service/engine/engine.h"

namespace tailweir {

class RunSummary {
 public:
  RunSummary(const Settings& settings, const std::vector<PanelDescription>& descriptions);

  // Takes one record of the engine's. O(1) for estimates.
  void add(const Record& record);

  // What is said of the whole run beside its records.
  struct Run {
    std::string settings, recording;  // names as given
    std::vector<std::string> unused_columns;
    std::string ended_early;  // why, one line; empty when the recording was read to its end
  };
  std::string text(const Run& run, const EngineCounters& counters) const;

 private:
  struct HorizonSummary {
    std::uint64_t estimates = 0, not_live = 0, scored = 0, flags = 0, severe = 0;
    std::uint64_t raised = 0, confirmed = 0;
    EstimateRecord last;  // without matrices
  };
  // A flagged sample of a panel: its most extreme horizon, and the names of all that flagged it.
  struct LargestFlag {
    FlagRecord record;
    std::vector<std::uint32_t> horizons;
  };
  void keep_large(const FlagRecord& record);
  std::string panel_text(std::size_t panel) const;
  std::string flag_text(const LargestFlag& flag) const;

  std::vector<PanelDescription> descriptions_;
  std::vector<double> rates_;                          // nominal flag rate, by panel
  std::vector<std::vector<HorizonSummary>> horizons_;  // by panel
  std::vector<AlertRecord> alerts_;                    // the first forty
  std::vector<LargestFlag> largest_;                   // most extreme first, at most ten
  std::int64_t first_time_ns_ = 0, last_time_ns_ = 0;
  bool empty_ = true;
};

}  // namespace tailweir

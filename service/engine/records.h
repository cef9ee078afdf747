// The records tailweir publishes: one estimate per sample and horizon, flags, alerts, refusals.
//
// They are the actions of the engine, the payload of the wire and the lines of replay: one set of
// fields everywhere (docs: service/wire/README.md). Thread rule: plain values, moved between
// threads.
#pragma once

#include <cstdint>
#include <string>
#include <variant>
#include <vector>

#include "core/panel.h"

namespace tailweir {

// Names that records refer to by index; sent once per version as a description.
struct PanelDescription {
  std::string name;
  std::vector<std::string> channels;
  std::vector<std::string> horizons;
  std::uint32_t channels_version = 1;
};

struct EstimateRecord {
  std::uint64_t sequence = 0;  // of the sample, counted by the engine from 1
  std::int64_t time_ns = 0;    // of the sample, since 1970-01-01T00:00Z
  std::uint32_t panel = 0;     // index in the settings
  std::uint32_t horizon = 0;   // index in the panel
  std::uint32_t channels_version = 1;
  bool flagged = false;  // a flag of this horizon follows
  Estimate estimate;
  std::vector<double> centre;  // p, empty when the horizon has no scatter yet
  // Share of each channel's values in the memory that were observed; empty when all were.
  std::vector<double> channel_coverage;
  std::vector<double> scatter;  // p(p+1)/2, lower triangle by rows, empty likewise
};

struct FlagRecord {
  std::uint64_t sequence = 0;
  std::int64_t time_ns = 0;
  std::uint32_t panel = 0;
  std::uint32_t horizon = 0;
  Flag flag;
  std::uint64_t flagged = 0;    // flags of this horizon so far, this one included
  double flagged_expected = 0;  // flags expected at the nominal rate by now
};

struct AlertRecord {
  std::uint64_t sequence = 0;
  std::int64_t time_ns = 0;
  std::uint32_t panel = 0;
  std::uint32_t horizon = 0;
  std::uint64_t since = 0;  // sequence of the sample the change is dated to
  detect::Alert alert;
  std::string text;  // what changed, from what to what, since when, with what confidence
};

using Record = std::variant<EstimateRecord, FlagRecord, AlertRecord>;

}  // namespace tailweir

// Records as JSON lines: one writer for replay's files and for tap --json, so that live and
// replayed lines are the same to the byte.
//
// Numbers are the shortest decimal that reads back to the same double; what is not finite is null;
// times are RFC 3339 in UTC with nanoseconds. Thread rule: one owner.
#pragma once

#include <string>
#include <vector>

#include "service/engine/engine.h"
#include "service/engine/records.h"

namespace tailweir {

const char* name_of(HorizonState state);
const char* name_of(StateReason reason);
const char* name_of(tail::NuStatus status);
const char* name_of(Severity severity);

// Appends the shortest round-trip decimal, or null.
void append_number(std::string& text, double value);

class RecordLines {
 public:
  // matrices: which estimate lines carry centre and scatter (null on the others).
  RecordLines(std::vector<PanelDescription> descriptions, MatricesPolicy matrices);

  // The record's line without a newline; valid until the next call.
  const std::string& line(const Record& record);
  const std::string& line(const EstimateRecord& record);
  const std::string& line(const FlagRecord& record);

 private:
  void begin(std::uint64_t sequence, std::int64_t time_ns, std::uint32_t panel,
             std::uint32_t horizon);
  void field(const char* name, double value);
  void field(const char* name, const char* word);
  void list(const char* name, const std::vector<double>& values);

  std::vector<PanelDescription> descriptions_;
  MatricesPolicy matrices_;
  std::string text_;
};

}  // namespace tailweir

// Records as JSON lines: what `replay` writes and `tap --json` prints, the same bytes for the same
// record.
//
//   {"sequence":7,"time":"2026-03-01T09:30:00.000000000Z","panel":"metals","horizon":"slow",...}
//
// Numbers are the shortest text that reads back to the same double; what is not defined is null.
// Fields never change order (docs: service/report/README.md). Written by hand, not through a JSON
// library: one line per sample and horizon is the hot path. Thread rule: one owner. No I/O.
#pragma once

#include <cstdint>
#include <string>
#include <type_traits>
#include <vector>

#include "core/result.h"
#include "service/engine/engine.h"
#include "service/engine/records.h"

namespace tailweir {

const char* name_of(HorizonState state);
const char* name_of(StateReason reason);
const char* name_of(tail::NuStatus status);
const char* name_of(Severity severity);

// Reads "every", a whole number N > 0, "flagged" (also "alerts") or "never".
Result<MatricesPolicy> parse_matrices_policy(const std::string& text);

class RecordLines {
 public:
  // matrices: which estimate lines carry centre and scatter (null on the others).
  RecordLines(const std::vector<PanelDescription>& descriptions, MatricesPolicy matrices);

  // Whether the descriptions have every name the record refers to, and its arrays fit.
  bool knows(const Record& record) const;
  bool knows(const EstimateRecord& record) const;
  bool knows(const FlagRecord& record) const;
  bool knows(const AlertRecord& record) const;

  // Appends the line of a record, line feed included. Precondition: knows(record). No allocation
  // once `out` has room.
  void append(const Record& record, std::string& out) const;
  void append(const FlagRecord& record, std::string& out) const;
  void append(const AlertRecord& record, std::string& out) const;
  // The same with the policy overruled.
  void append(const EstimateRecord& record, bool matrices, std::string& out) const;

  // The record's line without its line feed; valid until the next call.
  template <typename AnyRecord>
  const std::string& line(const AnyRecord& record) {
    text_.clear();
    if constexpr (std::is_same_v<AnyRecord, EstimateRecord>) {
      append(record, matrices_.wants(record.sequence, record.flagged), text_);
    } else {
      append(record, text_);
    }
    text_.pop_back();
    return text_;
  }

 private:
  // Ready-made pieces of text of one panel.
  struct Pieces {
    std::vector<std::string> panel_and_horizon;  // ,"panel":"metals","horizon":"slow"
    std::vector<std::string> channel;            // "copper"
  };
  bool has(std::uint32_t panel, std::uint32_t horizon) const;

  std::vector<Pieces> pieces_;
  MatricesPolicy matrices_;
  std::string text_;
};

}  // namespace tailweir

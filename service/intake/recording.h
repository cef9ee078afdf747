// Reads a recording: CSV (RFC 4180) with the header time,NAME,NAME,... as a stream of any length.
//
// time is RFC 3339, a bare date or integer nanoseconds and never goes back; an empty cell, nan or
// NA is missing; CRLF and quotes are fine; inf, words and ragged rows are refused as FILE:LINE.
// Thread rule: one owner.
#pragma once

#include <cstdint>
#include <istream>
#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "core/result.h"

namespace tailweir {

struct RecordedSample {
  std::int64_t time_ns = 0;
  std::vector<double> values;  // one per channel of the header, NaN where missing
  std::uint64_t line = 0;      // in the file, for messages
};

class RecordingReader {
 public:
  // path "-" reads standard input. The header is read and checked.
  static Result<RecordingReader> open(const std::string& path);
  // The same from a stream; name stands for the file in messages.
  static Result<RecordingReader> from(std::unique_ptr<std::istream> in, const std::string& name);

  const std::vector<std::string>& channels() const { return channels_; }
  const std::string& name() const { return name_; }
  // Bytes of the file and bytes read so far; size 0 when unknown.
  std::uint64_t size() const { return size_; }
  std::uint64_t position() const { return position_; }

  // The next sample, nothing at the end, or a Fault; after a Fault the rest is still readable.
  Result<std::optional<RecordedSample>> next();

 private:
  bool read_record(std::vector<std::string>& cells, std::optional<Fault>& fault);
  Fault at_line(const std::string& what, const std::string& allowed) const;

  std::unique_ptr<std::istream> owned_;
  std::istream* in_ = nullptr;
  std::string name_;
  std::vector<std::string> channels_;
  std::vector<std::string> cells_;
  std::string line_text_;
  std::uint64_t line_ = 0, size_ = 0, position_ = 0;
  std::optional<std::int64_t> last_time_;
};

}  // namespace tailweir

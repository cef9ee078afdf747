// Reads a recording: samples in a CSV file (RFC 4180), streamed row by row at any length.
//
//   time,copper,tin
//   2026-03-01T09:30:00Z,0.0012,-0.0004
//
// time is RFC 3339, a bare date, or whole nanoseconds since 1970 (service/intake/time_text.h). An
// empty cell, `nan` or `NA` is a missing value. CRLF, a UTF-8 mark at the start and quoted cells
// are accepted; empty lines only at the end. Refused with FILE:LINE: a ragged row, a word for a
// number, an infinite or unrepresentable number, time going backwards, duplicate or bad channel
// names, a row above 16 MB. The header `time,channel,value` (one tick a row) is recognised and
// refused for now. Thread rule: a reader belongs to one thread. Numbers are read without the
// locale.
#pragma once

#include <cstdint>
#include <cstdio>
#include <memory>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "core/result.h"

namespace tailweir {

struct RecordedSample {
  std::int64_t time_ns = 0;
  std::vector<double> values;  // one per channel of the header, NaN where missing
  std::size_t line = 0;        // of the row's first character, counted from 1
};

class RecordingReader {
 public:
  // Opens a file, or standard input for "-", and reads the header. `unreadable`, when given, tells
  // after a Fault whether the machine refused (no such file, no right, I/O error) rather than the
  // content being wrong.
  static Result<RecordingReader> open(const std::string& path, bool* unreadable = nullptr);
  // The same over a text already in memory; name stands for the file in messages.
  static Result<RecordingReader> from_text(std::string text, std::string name);

  // Names in the header's order.
  const std::vector<std::string>& channels() const { return channels_; }

  // The next sample, nothing at the end, or a Fault. A row whose cells are wrong is behind the
  // reader after its Fault: the rest is still readable. After a broken quote, an empty line or an
  // I/O error the reader stays at the Fault. No allocation but the sample's values, once the
  // longest row has been seen.
  Result<std::optional<RecordedSample>> next();

  // Whether the last Fault came from the machine (see open).
  bool unreadable() const { return unreadable_; }
  // "FILE:LINE" of a sample, for messages about it.
  std::string place(std::size_t line) const;
  // The file as messages name it.
  const std::string& name() const { return name_; }
  // Bytes handed out so far, and in the whole file (0 when it is no regular file).
  std::uint64_t position() const { return position_; }
  std::uint64_t size() const { return size_; }

 private:
  struct Closer {
    void operator()(std::FILE* file) const {
      if (file != nullptr && file != stdin) std::fclose(file);
    }
  };
  enum class Fetch { row, end, fault };

  RecordingReader() = default;
  std::optional<Fault> read_header();
  Fetch fetch_row();  // sets row_, line_; or fault_
  bool find_row_end(std::size_t& end, bool& complete);
  bool refill();
  bool split_row();  // row_ -> cells_
  Result<double> number(std::string_view cell, std::size_t column) const;
  Fault fault_at(std::size_t line, std::string what, std::string allowed) const;
  Fault fail(Fault fault);

  std::unique_ptr<std::FILE, Closer> file_;
  std::string name_;
  std::vector<std::string> channels_;
  std::string buffer_;      // holds at least the current row
  std::size_t start_ = 0;   // first unread byte of buffer_
  bool exhausted_ = false;  // the file has no more bytes than buffer_ holds
  std::string_view row_;    // current row without its line end, inside buffer_
  std::vector<std::string_view> cells_;
  std::string unescaped_;  // storage of cells with doubled quotes
  std::size_t line_ = 0;   // of the current row
  std::size_t next_line_ = 1;
  std::optional<std::int64_t> last_time_;
  std::optional<Fault> fault_;
  bool unreadable_ = false;
  std::uint64_t position_ = 0, size_ = 0;
};

}  // namespace tailweir

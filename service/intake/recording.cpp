#include "service/intake/recording.h"

#include <algorithm>
#include <charconv>
#include <cmath>
#include <fstream>
#include <iostream>
#include <limits>
#include <set>

#include "service/intake/time_text.h"

namespace tailweir {
namespace {

constexpr std::size_t kLongestLine = 1 << 24;

std::string_view trimmed(std::string_view text) {
  while (!text.empty() && (text.front() == ' ' || text.front() == '\t')) text.remove_prefix(1);
  while (!text.empty() && (text.back() == ' ' || text.back() == '\t')) text.remove_suffix(1);
  return text;
}

std::string shown(std::string_view text) {
  std::string out;
  for (const char c : text.substr(0, 40)) {
    out += static_cast<unsigned char>(c) < 32 || static_cast<unsigned char>(c) > 126 ? '?' : c;
  }
  return "'" + out + (text.size() > 40 ? "..." : "") + "'";
}

bool is_channel_name(std::string_view name) {
  return !name.empty() && name.size() <= 31 && std::all_of(name.begin(), name.end(), [](char c) {
    return (c >= 'a' && c <= 'z') || (c >= '0' && c <= '9') || c == '_' || c == '.' || c == '-';
  });
}

bool is_missing(std::string_view text) {
  return text.empty() || text == "NA" || text == "nan" || text == "NaN";
}

}  // namespace

Fault RecordingReader::at_line(const std::string& what, const std::string& allowed) const {
  return {name_ + ":" + std::to_string(line_), what, allowed};
}

Result<RecordingReader> RecordingReader::open(const std::string& path) {
  if (path == "-") {
    return from(std::make_unique<std::istream>(std::cin.rdbuf()), "standard input");
  }
  auto file = std::make_unique<std::ifstream>(path, std::ios::binary);
  if (!*file)
    return Fault{path, "cannot open the recording", "a readable CSV file, or - for standard input"};
  file->seekg(0, std::ios::end);
  const auto size = file->tellg();
  file->seekg(0);
  file->clear();
  Result<RecordingReader> reader = from(std::move(file), path);
  if (reader && size > 0) reader.value().size_ = static_cast<std::uint64_t>(size);
  return reader;
}

Result<RecordingReader> RecordingReader::from(std::unique_ptr<std::istream> in,
                                              const std::string& name) {
  RecordingReader reader;
  reader.owned_ = std::move(in);
  reader.in_ = reader.owned_.get();
  reader.name_ = name;
  std::optional<Fault> fault;
  if (!reader.read_record(reader.cells_, fault)) {
    if (fault) return *fault;
    return Fault{name, "the recording is empty", "a header time,NAME,NAME,... and rows"};
  }
  if (reader.cells_[0].rfind("\xEF\xBB\xBF", 0) == 0) reader.cells_[0].erase(0, 3);
  if (reader.cells_.size() == 3 && reader.cells_[1] == "channel" && reader.cells_[2] == "value") {
    return reader.at_line("ticks (time,channel,value) are not supported by this version",
                          "one row a sample: time,NAME,NAME,...");
  }
  if (trimmed(reader.cells_[0]) != "time" || reader.cells_.size() < 2) {
    return reader.at_line("the header starts with " + shown(reader.cells_[0]),
                          "time,NAME,NAME,...");
  }
  std::set<std::string> names;
  for (std::size_t k = 1; k < reader.cells_.size(); ++k) {
    const std::string cell(trimmed(reader.cells_[k]));
    if (!is_channel_name(cell)) {
      return reader.at_line("channel name " + shown(cell) + " in the header is not a name",
                            "1 to 31 of a-z 0-9 _ . -");
    }
    if (!names.insert(cell).second) {
      return reader.at_line("channel " + shown(cell) + " is in the header twice", "distinct names");
    }
    reader.channels_.push_back(cell);
  }
  return reader;
}

// One CSV record, which may span lines inside quotes. False at the end or on a fault.
bool RecordingReader::read_record(std::vector<std::string>& cells, std::optional<Fault>& fault) {
  do {
    if (!std::getline(*in_, line_text_)) return false;
    ++line_;
    position_ += line_text_.size() + 1;
    if (!line_text_.empty() && line_text_.back() == '\r') line_text_.pop_back();
  } while (line_text_.empty());
  cells.clear();
  cells.emplace_back();
  bool quoted = false;
  for (std::size_t k = 0;; ++k) {
    if (k == line_text_.size()) {
      if (!quoted) return true;
      std::string more;
      if (line_text_.size() > kLongestLine || !std::getline(*in_, more)) {
        fault = at_line("a quote is not closed", "\"...\" closed on some line");
        return false;
      }
      ++line_;
      position_ += more.size() + 1;
      line_text_ += "\n" + more;
    }
    const char c = line_text_[k];
    if (quoted) {
      if (c != '"') {
        cells.back() += c;
      } else if (k + 1 < line_text_.size() && line_text_[k + 1] == '"') {
        cells.back() += '"';
        ++k;
      } else {
        quoted = false;
      }
    } else if (c == '"' && cells.back().empty()) {
      quoted = true;
    } else if (c == ',') {
      cells.emplace_back();
    } else {
      cells.back() += c;
    }
  }
}

Result<std::optional<RecordedSample>> RecordingReader::next() {
  std::optional<Fault> fault;
  if (!read_record(cells_, fault)) {
    if (fault) return *fault;
    return std::optional<RecordedSample>();
  }
  if (cells_.size() != channels_.size() + 1) {
    return at_line("the row has " + std::to_string(cells_.size()) + " cells, the header " +
                       std::to_string(channels_.size() + 1),
                   "one cell per column, empty where missing");
  }
  RecordedSample sample;
  sample.line = line_;
  const std::string_view time_cell = trimmed(cells_[0]);
  const std::optional<std::int64_t> time = parse_time(time_cell);
  if (!time) {
    return at_line("time " + shown(time_cell) + " is not a time",
                   "RFC 3339 such as 2026-03-01T09:30:00Z, a date, or integer nanoseconds");
  }
  if (last_time_ && *time < *last_time_) {
    return at_line("time " + shown(time_cell) + " goes backwards", "rows in order of time");
  }
  sample.time_ns = *time;
  sample.values.resize(channels_.size());
  for (std::size_t k = 0; k < channels_.size(); ++k) {
    const std::string_view cell = trimmed(cells_[k + 1]);
    if (is_missing(cell)) {
      sample.values[k] = std::numeric_limits<double>::quiet_NaN();
      continue;
    }
    const std::string_view digits = cell.front() == '+' ? cell.substr(1) : cell;
    const auto [end, error] =
        std::from_chars(digits.data(), digits.data() + digits.size(), sample.values[k]);
    if (error != std::errc() || end != digits.data() + digits.size() ||
        !std::isfinite(sample.values[k])) {
      return at_line(channels_[k] + " " + shown(cell) + " is not a finite number",
                     "a number, or an empty cell where missing");
    }
  }
  last_time_ = *time;
  return std::optional<RecordedSample>(std::move(sample));
}

}  // namespace tailweir

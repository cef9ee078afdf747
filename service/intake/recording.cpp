#include "service/intake/recording.h"

#include <sys/stat.h>
#include <unistd.h>

#include <algorithm>
#include <cerrno>
#include <charconv>
#include <cmath>
#include <cstring>
#include <limits>

#include "service/intake/time_text.h"
#include "service/settings/names.h"

namespace tailweir {
namespace {

constexpr std::size_t kChunk = std::size_t{1} << 18;
constexpr std::size_t kLongestRow = std::size_t{1} << 24;

std::string_view trimmed(std::string_view text) {
  const std::size_t first = text.find_first_not_of(" \t");
  if (first == text.npos) return {};
  return text.substr(first, text.find_last_not_of(" \t") - first + 1);
}

bool is_missing(std::string_view cell) {
  if (cell.empty() || cell == "NA") return true;
  return cell.size() == 3 && (cell[0] | 0x20) == 'n' && (cell[1] | 0x20) == 'a' &&
         (cell[2] | 0x20) == 'n';
}

std::string lower(std::string_view text) {
  std::string out(text);
  for (char& c : out) c = c >= 'A' && c <= 'Z' ? static_cast<char>(c + 32) : c;
  return out;
}

}  // namespace

Fault RecordingReader::fault_at(std::size_t line, std::string what, std::string allowed) const {
  return {place(line), std::move(what), std::move(allowed)};
}

std::string RecordingReader::place(std::size_t line) const {
  return name_ + ":" + std::to_string(line);
}

Fault RecordingReader::fail(Fault fault) {
  fault_ = fault;
  return fault;
}

Result<RecordingReader> RecordingReader::open(const std::string& path, bool* unreadable) {
  if (unreadable != nullptr) *unreadable = false;
  RecordingReader reader;
  reader.name_ = path == "-" ? "standard input" : path;
  reader.file_.reset(path == "-" ? stdin : std::fopen(path.c_str(), "rb"));
  if (!reader.file_) {
    if (unreadable != nullptr) *unreadable = true;
    return Fault{reader.name_, std::string("cannot be opened: ") + std::strerror(errno),
                 "name a CSV file that can be read, or - for standard input"};
  }
  struct stat status {};
  if (fstat(fileno(reader.file_.get()), &status) == 0 && S_ISREG(status.st_mode)) {
    reader.size_ = static_cast<std::uint64_t>(status.st_size);
  }
  const std::optional<Fault> fault = reader.read_header();
  if (unreadable != nullptr) *unreadable = reader.unreadable_;
  if (fault) return *fault;
  return reader;
}

Result<RecordingReader> RecordingReader::from_text(std::string text, std::string name) {
  RecordingReader reader;
  reader.name_ = std::move(name);
  reader.size_ = text.size();
  reader.buffer_ = std::move(text);
  reader.exhausted_ = true;
  const std::optional<Fault> fault = reader.read_header();
  if (fault) return *fault;
  return reader;
}

// Appends a chunk of the file to buffer_. False on an I/O error, with fault_ set.
bool RecordingReader::refill() {
  buffer_.erase(0, start_);
  start_ = 0;
  const std::size_t held = buffer_.size();
  buffer_.resize(held + kChunk);
  // read(2), not fread(3): a pipe hands over what it has instead of waiting for a whole chunk.
  const ssize_t got = ::read(fileno(file_.get()), buffer_.data() + held, kChunk);
  buffer_.resize(held + static_cast<std::size_t>(std::max<ssize_t>(got, 0)));
  exhausted_ = got <= 0;
  if (got >= 0) return true;
  unreadable_ = true;
  fault_ = Fault{name_, std::string("cannot be read: ") + std::strerror(errno),
                 "name a CSV file that can be read"};
  return false;
}

// Looks for the end of the row that starts at start_: the offset of its line feed, or of the end of
// what is held (complete = false). False when a quote stands where none may, with fault_ set.
bool RecordingReader::find_row_end(std::size_t& end, bool& complete) {
  const std::size_t feed = buffer_.find('\n', start_);
  end = std::min(feed, buffer_.size());
  complete = feed != buffer_.npos;
  if (std::memchr(buffer_.data() + start_, '"', end - start_) == nullptr) return true;
  bool at_cell_start = true, inside = false;
  for (std::size_t i = start_; i < buffer_.size(); ++i) {
    const char c = buffer_[i];
    if (inside) {
      if (c != '"') continue;
      if (i + 1 < buffer_.size() && buffer_[i + 1] == '"') {
        ++i;
      } else {
        inside = false;
      }
    } else if (c == '\n') {
      end = i;
      complete = true;
      return true;
    } else if (c == '"') {
      if (!at_cell_start) {
        fault_ = fault_at(next_line_, "has a quote inside a cell",
                          "quote the whole cell and double the quotes in it");
        return false;
      }
      inside = true;
    }
    at_cell_start = !inside && c == ',';
  }
  end = buffer_.size();
  complete = false;
  if (inside && exhausted_) {
    fault_ = fault_at(next_line_, "opens a quoted cell that never closes", "close it with a quote");
    return false;
  }
  return true;
}

RecordingReader::Fetch RecordingReader::fetch_row() {
  std::size_t end = 0;
  bool complete = false;
  for (;;) {
    if (!find_row_end(end, complete)) return Fetch::fault;
    if (complete || exhausted_) break;
    if (buffer_.size() - start_ > kLongestRow) {
      fault_ = fault_at(next_line_, "is longer than 16 MB", "one sample a line");
      return Fetch::fault;
    }
    if (!refill()) return Fetch::fault;
  }
  if (start_ == buffer_.size()) return Fetch::end;
  row_ = std::string_view(buffer_).substr(start_, end - start_);
  line_ = next_line_;
  next_line_ += 1 + static_cast<std::size_t>(std::count(row_.begin(), row_.end(), '\n'));
  const std::size_t after = complete ? end + 1 : end;
  position_ += after - start_;
  start_ = after;
  if (!row_.empty() && row_.back() == '\r') row_.remove_suffix(1);
  return Fetch::row;
}

// Cuts row_ into cells_. False when a quoted cell has something behind it, with fault_ set.
bool RecordingReader::split_row() {
  cells_.clear();
  unescaped_.clear();
  unescaped_.reserve(row_.size());  // views into it must stay where they are
  std::string_view rest = row_;
  for (;;) {
    std::size_t comma = 0;
    if (!rest.empty() && rest[0] == '"') {
      std::size_t i = 1;
      const std::size_t from = unescaped_.size();
      for (; i < rest.size(); ++i) {
        if (rest[i] == '"') {
          if (i + 1 >= rest.size() || rest[i + 1] != '"') break;
          ++i;
        }
        unescaped_ += rest[i];
      }
      cells_.push_back(std::string_view(unescaped_).substr(from));
      comma = i + 1;
      if (comma < rest.size() && rest[comma] != ',') {
        fault_ = fault_at(line_, "has characters behind a closing quote", "put a comma there");
        return false;
      }
    } else {
      comma = rest.find(',');
      cells_.push_back(rest.substr(0, comma));
    }
    if (comma >= rest.size()) return true;
    rest.remove_prefix(comma + 1);
  }
}

std::optional<Fault> RecordingReader::read_header() {
  const std::string shape = "the first line is time,NAME,NAME,...";
  while (buffer_.size() < 3 && !exhausted_) {
    if (!refill()) return fault_;
  }
  if (buffer_.compare(0, 3, "\xef\xbb\xbf") == 0) start_ = 3;
  position_ = start_;
  const Fetch fetched = fetch_row();
  if (fetched == Fetch::fault) return fault_;
  if (fetched == Fetch::end) return fail(fault_at(1, "is empty", shape));
  if (row_.substr(0, 2) == "\xff\xfe" || row_.substr(0, 2) == "\xfe\xff") {
    return fail(fault_at(1, "is UTF-16 text", "save it as UTF-8"));
  }
  if (!split_row()) return fault_;
  if (trimmed(cells_[0]) != "time") {
    return fail(fault_at(line_, "the first column is " + quoted(cells_[0]) + ", not time", shape));
  }
  if (cells_.size() == 3 && trimmed(cells_[1]) == "channel" && trimmed(cells_[2]) == "value") {
    return fail(fault_at(line_, "is a recording of ticks, which this version does not read yet",
                         "one column per channel: time,NAME,NAME,..."));
  }
  if (cells_.size() < 2) return fail(fault_at(line_, "names no channel", shape));
  for (std::size_t i = 1; i < cells_.size(); ++i) {
    const std::string name(trimmed(cells_[i]));
    if (!is_name(name)) {
      const std::string cure =
          is_name(lower(name)) ? ", such as " + quoted(lower(name)) : std::string();
      return fail(fault_at(
          line_, "column " + std::to_string(i + 1) + ": " + quoted(name) + " is no channel name",
          kNameRule + cure));
    }
    if (std::find(channels_.begin(), channels_.end(), name) != channels_.end()) {
      return fail(fault_at(
          line_, "column " + std::to_string(i + 1) + ": channel " + quoted(name) + " stands twice",
          "each channel has one column"));
    }
    channels_.push_back(name);
  }
  return std::nullopt;
}

Result<double> RecordingReader::number(std::string_view cell, std::size_t column) const {
  std::string_view text = trimmed(cell);
  if (is_missing(text)) return std::numeric_limits<double>::quiet_NaN();
  if (text.size() > 1 && text[0] == '+' && text[1] != '-') text.remove_prefix(1);
  double value = 0;
  const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), value);
  const std::string what = "column " + channels_[column] + ": " + quoted(cell);
  if (error == std::errc::invalid_argument || end != text.data() + text.size() ||
      std::isnan(value)) {
    return fault_at(line_, what + " is not a number", "write 0.0125, or leave it empty if missing");
  }
  if (error == std::errc::result_out_of_range) {
    return fault_at(line_, what + " is outside the range of a double", "use another unit");
  }
  if (std::isinf(value)) {
    return fault_at(line_, what + " is infinite", "write a finite number, or leave it empty");
  }
  return value;
}

Result<std::optional<RecordedSample>> RecordingReader::next() {
  if (fault_) return *fault_;
  Fetch fetched = fetch_row();
  if (fetched == Fetch::row && row_.empty()) {
    const std::size_t empty_line = line_;
    while (fetched == Fetch::row && row_.empty()) fetched = fetch_row();
    if (fetched == Fetch::row) {
      return fail(fault_at(empty_line, "is an empty line between samples", "remove it"));
    }
  }
  if (fetched == Fetch::fault) return *fault_;
  if (fetched == Fetch::end) return std::optional<RecordedSample>();
  if (!split_row()) return *fault_;
  if (cells_.size() != channels_.size() + 1) {
    return fault_at(line_, "has " + std::to_string(cells_.size()) + " cells",
                    "the header names " + std::to_string(channels_.size() + 1));
  }
  const std::string_view when = trimmed(cells_[0]);
  const Result<std::int64_t> time = read_time(when);
  if (!time) {
    return fault_at(line_, "time " + quoted(when) + " " + time.fault().what, time.fault().allowed);
  }
  if (last_time_ && time.value() < *last_time_) {
    return fault_at(
        line_,
        "time " + std::string(when) + " goes back, the row before has " + format_time(*last_time_),
        "sort the rows by time");
  }
  RecordedSample sample;
  sample.time_ns = time.value();
  sample.line = line_;
  sample.values.reserve(channels_.size());
  for (std::size_t i = 0; i < channels_.size(); ++i) {
    const Result<double> value = number(cells_[i + 1], i);
    if (!value) return value.fault();
    sample.values.push_back(value.value());
  }
  last_time_ = sample.time_ns;
  return std::optional<RecordedSample>(std::move(sample));
}

}  // namespace tailweir

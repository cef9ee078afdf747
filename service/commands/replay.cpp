// tailweir replay: the daemon's engine over a recording, as fast as it goes. Writes
// estimates.jsonl, flags.jsonl, last.jsonl (the last estimates, with their matrices) and
// report.txt.

#include <algorithm>
#include <cerrno>
#include <cstdio>
#include <cstring>
#include <filesystem>
#include <optional>
#include <system_error>

#include "service/commands/commands.h"
#include "service/commands/terminal.h"
#include "service/engine/engine.h"
#include "service/intake/recording.h"
#include "service/report/record_lines.h"
#include "service/report/summary.h"

namespace tailweir {
namespace {

// A file that is written in large pieces; the first error sticks.
class OutputFile {
 public:
  bool open(const std::filesystem::path& path) {
    path_ = path.string();
    file_ = std::fopen(path_.c_str(), "wb");
    if (file_ == nullptr) error_ = errno;
    return file_ != nullptr;
  }
  ~OutputFile() { close(); }
  OutputFile() = default;
  OutputFile(const OutputFile&) = delete;
  OutputFile& operator=(const OutputFile&) = delete;

  // Lines are appended to this text, and leave it by flush().
  std::string text;

  // Writes the text out when it is large, or always.
  bool flush(bool always) {
    constexpr std::size_t kLarge = std::size_t{1} << 20;
    if (text.size() < kLarge && !always) return true;
    if (std::fwrite(text.data(), 1, text.size(), file_) != text.size() && error_ == 0) {
      error_ = errno;
    }
    text.clear();
    return error_ == 0;
  }
  bool close() {
    if (file_ == nullptr) return error_ == 0;
    flush(true);
    if (std::fclose(file_) != 0 && error_ == 0) error_ = errno;
    file_ = nullptr;
    return error_ == 0;
  }
  Fault fault() const {
    return {path_, std::string("cannot be written: ") + std::strerror(error_),
            "name a folder with room and the right to write"};
  }

 private:
  std::string path_;
  std::FILE* file_ = nullptr;
  int error_ = 0;
};

// Makes the folder and looks whether it may be written into.
std::optional<Fault> prepare_folder(const std::string& into, bool overwrite) {
  namespace fs = std::filesystem;
  std::error_code error;
  fs::create_directories(into, error);
  if (error || !fs::is_directory(into, error)) {
    return Fault{into, "cannot be made a folder" + (error ? ": " + error.message() : ""),
                 "name another with --into"};
  }
  const bool empty = fs::is_empty(into, error);
  if (error) return Fault{into, "cannot be read: " + error.message(), "name another with --into"};
  if (empty || overwrite) return std::nullopt;
  return Fault{into, "is not empty", "name another folder, or add --overwrite"};
}

class Replay {
 public:
  Replay(Settings settings, RecordingReader reader, MatricesPolicy policy)
      : engine_(std::move(settings)),
        reader_(std::move(reader)),
        lines_(engine_.descriptions(), policy),
        summary_(engine_.settings(), engine_.descriptions()) {
    engine_.set_matrices(policy);
  }

  // Finds the column of every channel.
  std::optional<Fault> match_columns();
  int run(const ReplayOptions& options);

 private:
  int play(bool keep_going);
  bool take(const Actions& actions);

  Engine engine_;
  RecordingReader reader_;
  RecordLines lines_;
  RunSummary summary_;
  RunSummary::Run about_;
  std::vector<std::size_t> columns_;  // of each channel of the settings
  Actions actions_;
  OutputFile estimates_, flags_, alerts_, last_, report_;
};

std::optional<Fault> Replay::match_columns() {
  const std::vector<std::string>& names = reader_.channels();
  std::vector<bool> used(names.size());
  for (const ChannelSettings& channel : engine_.settings().channels) {
    const auto found = std::find(names.begin(), names.end(), channel.name);
    if (found == names.end()) {
      return Fault{reader_.place(1), "has no column " + channel.name,
                   "the settings name it as a channel"};
    }
    columns_.push_back(static_cast<std::size_t>(found - names.begin()));
    used[columns_.back()] = true;
  }
  for (std::size_t i = 0; i < names.size(); ++i) {
    if (!used[i]) about_.unused_columns.push_back(names[i]);
  }
  return std::nullopt;
}

// Writes what one accepted sample gave.
bool Replay::take(const Actions& actions) {
  for (const Record& record : actions.records) {
    summary_.add(record);
    std::string& out = std::holds_alternative<FlagRecord>(record)    ? flags_.text
                       : std::holds_alternative<AlertRecord>(record) ? alerts_.text
                                                                     : estimates_.text;
    lines_.append(record, out);
  }
  return estimates_.flush(false) && flags_.flush(false) && alerts_.flush(false);
}

int Replay::play(bool keep_going) {
  Progress bar("replay");
  SampleEvent event;
  event.values.resize(columns_.size());
  for (;;) {
    Result<std::optional<RecordedSample>> sample = reader_.next();
    if (!sample) {
      about_.ended_early = sample.fault().line();
      return reader_.unreadable() ? kIoError : kBadData;
    }
    if (!sample.value()) return kOk;
    event.time_ns = sample.value()->time_ns;
    for (std::size_t i = 0; i < columns_.size(); ++i) {
      event.values[i] = sample.value()->values[columns_[i]];
    }
    engine_.step(event, actions_);
    if (!actions_.accepted && !keep_going) {
      Fault fault = actions_.refusal.fault;
      fault.where = reader_.place(sample.value()->line) + ": " + fault.where;
      about_.ended_early = fault.line();
      about_.ended_early += " (or add --keep-going)";
      return kBadData;
    }
    if (actions_.accepted && !take(actions_)) return kIoError;
    if (engine_.sequence() % 64 == 0) {
      bar.show(reader_.position(), reader_.size(), std::to_string(engine_.sequence()) + " samples");
    }
  }
}

int Replay::run(const ReplayOptions& options) {
  const std::filesystem::path into = options.directory;
  const std::pair<OutputFile*, const char*> files[] = {{&estimates_, "estimates.jsonl"},
                                                       {&flags_, "flags.jsonl"},
                                                       {&alerts_, "alerts.jsonl"},
                                                       {&last_, "last.jsonl"},
                                                       {&report_, "report.txt"}};
  for (const auto& [file, name] : files) {
    if (!file->open(into / name)) return complain(file->fault(), kIoError);
  }
  about_.settings = options.settings;
  about_.recording = reader_.name();
  const int code = play(options.keep_going);
  for (std::uint32_t panel = 0; panel < engine_.descriptions().size(); ++panel) {
    for (std::uint32_t h = 0; h < engine_.descriptions()[panel].horizons.size(); ++h) {
      lines_.append(engine_.latest(panel, h), true, last_.text);
    }
  }
  report_.text = summary_.text(about_, engine_.counters());
  for (const auto& [file, name] : files) {
    if (!file->close()) return complain(file->fault(), kIoError);
  }
  if (code != kOk) return complain({"", about_.ended_early, ""}, code);
  std::printf("%llu samples replayed, %llu refused; records and report.txt in %s\n",
              static_cast<unsigned long long>(engine_.counters().accepted),
              static_cast<unsigned long long>(engine_.counters().refused),
              options.directory.c_str());
  return kOk;
}

}  // namespace

int run_replay(const ReplayOptions& options) {
  const Result<MatricesPolicy> policy = parse_matrices_policy(options.matrices);
  if (!policy) return complain(policy.fault(), kUsage);
  Result<Settings> settings = load_settings(options.settings);
  if (!settings) return complain(settings.fault(), kBadSettings);
  for (const std::string& key : not_used(settings.value())) {
    std::fprintf(stderr, "tailweir: %s: %s is not used by this version\n", options.settings.c_str(),
                 key.c_str());
  }
  bool unreadable = false;
  Result<RecordingReader> reader = RecordingReader::open(options.recording, &unreadable);
  if (!reader) return complain(reader.fault(), unreadable ? kIoError : kBadData);
  Replay player(std::move(settings.value()), std::move(reader.value()), policy.value());
  if (const std::optional<Fault> fault = player.match_columns()) return complain(*fault, kBadData);
  if (const std::optional<Fault> fault = prepare_folder(options.directory, options.overwrite)) {
    return complain(*fault, kIoError);
  }
  return player.run(options);
}

}  // namespace tailweir

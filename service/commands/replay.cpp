// tailweir replay SETTINGS --from RECORDING --into DIR: the daemon's engine over a recording, as
// fast as it goes. Writes estimates.jsonl, flags.jsonl and report.txt.
#include <CLI/CLI.hpp>
#include <cerrno>
#include <cstdio>
#include <cstring>
#include <filesystem>
#include <memory>
#include <system_error>

#include "service/commands/commands.h"
#include "service/commands/progress.h"
#include "service/engine/engine.h"
#include "service/intake/recording.h"
#include "service/report/record_lines.h"
#include "service/report/summary.h"

namespace tailweir {
namespace {

struct ReplayOptions {
  std::string settings, from, into, matrices = "flagged";
  bool overwrite = false, keep_going = false;
};

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
  std::string complaint() const {
    return path_ + ": cannot be written: " + std::strerror(error_) +
           "; name a folder with room and the right to write";
  }

 private:
  std::string path_;
  std::FILE* file_ = nullptr;
  int error_ = 0;
};

int complain(int code, const std::string& line) {
  std::fprintf(stderr, "%s\n", line.c_str());
  return code;
}

// The folder exists and may be written into; otherwise the line that says why not.
std::string prepare_folder(const std::string& into, bool overwrite) {
  namespace fs = std::filesystem;
  std::error_code error;
  fs::create_directories(into, error);
  if (error || !fs::is_directory(into, error)) {
    return into + ": cannot be made a folder" + (error ? ": " + error.message() : "") +
           "; name another with --into";
  }
  const bool empty = fs::is_empty(into, error);
  if (error) return into + ": cannot be read: " + error.message() + "; name another with --into";
  if (!empty && !overwrite) {
    return into + ": is not empty; name another folder, or add --overwrite";
  }
  return "";
}

class Replay {
 public:
  Replay(Settings settings, RecordingReader reader, MatricesPolicy policy)
      : engine_(std::move(settings)),
        reader_(std::move(reader)),
        policy_(policy),
        lines_(engine_.descriptions(), policy),
        summary_(engine_.settings(), engine_.descriptions()) {
    engine_.set_matrices(policy);
  }

  // Finds the column of every channel. False, with the line, when one is not there.
  bool match_columns(std::string& complaint);
  int run(const ReplayOptions& options);

 private:
  int play(bool keep_going);
  bool take(const Actions& actions);
  void finish_lines();

  Engine engine_;
  RecordingReader reader_;
  MatricesPolicy policy_;
  RecordLines lines_;
  RunSummary summary_;
  RunSummary::Run about_;
  std::vector<std::size_t> columns_;  // of each channel of the settings
  Actions actions_;
  struct Written {
    std::uint32_t panel, horizon;
    bool flagged;
  };
  std::vector<Written> last_;  // estimate lines of the last sample
  std::size_t last_from_ = 0;  // where they start
  OutputFile estimates_, flags_, report_;
};

bool Replay::match_columns(std::string& complaint) {
  const std::vector<std::string>& names = reader_.channels();
  std::vector<bool> used(names.size());
  for (const ChannelSettings& channel : engine_.settings().channels) {
    const auto found = std::find(names.begin(), names.end(), channel.name);
    if (found == names.end()) {
      complaint = reader_.place(1) + ": has no column " + channel.name +
                  "; the settings name it as a channel";
      return false;
    }
    columns_.push_back(static_cast<std::size_t>(found - names.begin()));
    used[columns_.back()] = true;
  }
  for (std::size_t i = 0; i < names.size(); ++i) {
    if (!used[i]) about_.unused_columns.push_back(names[i]);
  }
  return true;
}

// Writes what one accepted sample gave. The last sample's lines stay in the buffer, because at the
// end they get their matrices.
bool Replay::take(const Actions& actions) {
  const bool good = estimates_.flush(false) && flags_.flush(false);
  last_.clear();
  last_from_ = estimates_.text.size();
  for (const Record& record : actions.records) {
    summary_.add(record);
    if (const auto* estimate = std::get_if<EstimateRecord>(&record)) {
      lines_.append(record, estimates_.text);
      last_.push_back({estimate->panel, estimate->horizon, estimate->flagged});
    } else {
      lines_.append(record, flags_.text);
    }
  }
  return good;
}

void Replay::finish_lines() {
  if (policy_.kind == MatricesPolicy::Kind::never) return;
  estimates_.text.resize(last_from_);
  for (const auto& [panel, horizon, flagged] : last_) {
    EstimateRecord record = engine_.latest(panel, horizon);
    record.flagged = flagged;
    lines_.append(record, true, estimates_.text);
  }
}

int Replay::play(bool keep_going) {
  ProgressBar bar("replay", reader_.size());
  SampleEvent event;
  event.values.resize(columns_.size());
  for (;;) {
    Result<std::optional<RecordedSample>> sample = reader_.next();
    if (!sample) {
      bar.wipe();
      about_.ended_early = sample.fault().line();
      return complain(reader_.unreadable() ? kIoError : kBadData, about_.ended_early);
    }
    if (!sample.value()) return kOk;
    event.time_ns = sample.value()->time_ns;
    for (std::size_t i = 0; i < columns_.size(); ++i) {
      event.values[i] = sample.value()->values[columns_[i]];
    }
    engine_.step(event, actions_);
    if (!actions_.accepted && !keep_going) {
      bar.wipe();
      Fault fault = actions_.refusal.fault;
      fault.where = reader_.place(sample.value()->line) + ": " + fault.where;
      about_.ended_early = fault.line();
      return complain(kBadData, about_.ended_early + " (or add --keep-going)");
    }
    if (actions_.accepted && !take(actions_)) return kIoError;
    bar.show(reader_.position(), engine_.sequence());
  }
}

int Replay::run(const ReplayOptions& options) {
  const std::filesystem::path into = options.into;
  const std::pair<OutputFile*, const char*> files[] = {
      {&estimates_, "estimates.jsonl"}, {&flags_, "flags.jsonl"}, {&report_, "report.txt"}};
  for (const auto& [file, name] : files) {
    if (!file->open(into / name)) return complain(kIoError, file->complaint());
  }
  about_.settings = options.settings;
  about_.recording = options.from == "-" ? "standard input" : options.from;
  const int code = play(options.keep_going);
  finish_lines();
  report_.text = summary_.text(about_, engine_.counters());
  const std::string text = report_.text;
  for (const auto& [file, name] : files) {
    if (!file->close()) return complain(kIoError, file->complaint());
  }
  if (code == kOk && (std::fwrite(text.data(), 1, text.size(), stdout) != text.size() ||
                      std::fflush(stdout) != 0)) {
    return complain(kIoError, "standard output: cannot be written; the files are complete");
  }
  return code;
}

int replay(const ReplayOptions& options) {
  const Result<MatricesPolicy> policy = parse_matrices_policy(options.matrices);
  if (!policy) return complain(kUsage, policy.fault().line());
  Result<Settings> settings = load_settings(options.settings);
  if (!settings) return complain(kBadSettings, settings.fault().line());
  for (const std::string& key : not_used(settings.value())) {
    std::fprintf(stderr, "%s: %s is not used by this version\n", options.settings.c_str(),
                 key.c_str());
  }
  bool unreadable = false;
  Result<RecordingReader> reader = RecordingReader::open(options.from, &unreadable);
  if (!reader) return complain(unreadable ? kIoError : kBadData, reader.fault().line());
  Replay player(std::move(settings.value()), std::move(reader.value()), policy.value());
  std::string complaint;
  if (!player.match_columns(complaint)) return complain(kBadData, complaint);
  complaint = prepare_folder(options.into, options.overwrite);
  if (!complaint.empty()) return complain(kIoError, complaint);
  return player.run(options);
}

}  // namespace

void add_replay_command(CLI::App& program, int& exit_code) {
  CLI::App* command = program.add_subcommand(
      "replay", "Runs settings over a recording as fast as it goes, and writes what they give.");
  const auto options = std::make_shared<ReplayOptions>();
  command->add_option("SETTINGS", options->settings, "settings file (YAML)")->required();
  command->add_option("--from", options->from, "recording (CSV), - for standard input")->required();
  command->add_option("--into", options->into, "folder for the files; made when absent")
      ->required();
  command
      ->add_option("--matrices", options->matrices,
                   "estimate lines with centre and scatter: every, a number N for every N-th "
                   "sample, flagged (and the last sample), never")
      ->capture_default_str();
  command->add_flag("--overwrite", options->overwrite, "write into a folder that is not empty");
  command->add_flag("--keep-going", options->keep_going,
                    "count samples that are refused instead of ending at the first");
  command->callback([options, &exit_code] { exit_code = replay(*options); });
}

}  // namespace tailweir

// tailweir replay: the same engine over a recording, as fast as it goes.

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <filesystem>
#include <fstream>
#include <memory>

#include "service/commands/commands.h"
#include "service/commands/terminal.h"
#include "service/engine/engine.h"
#include "service/intake/recording.h"
#include "service/intake/time_text.h"
#include "service/report/record_lines.h"

namespace tailweir {
namespace {

namespace fs = std::filesystem;

// What the report says of one horizon.
struct Tally {
  std::uint64_t flags = 0, severe = 0, scored = 0, live = 0;
  EstimateRecord last;
  double nu_least = INFINITY, nu_most = -INFINITY;
};

struct Worst {
  FlagRecord record;
};

Result<MatricesPolicy> matrices_policy(const std::string& word) {
  MatricesPolicy policy;
  if (word == "every") return policy;
  if (word == "never") {
    policy.kind = MatricesPolicy::Kind::never;
    return policy;
  }
  if (word == "flagged" || word == "alerts") {
    policy.kind = MatricesPolicy::Kind::flagged;
    return policy;
  }
  if (!word.empty() && word.size() < 10 &&
      std::all_of(word.begin(), word.end(), [](char c) { return c >= '0' && c <= '9'; }) &&
      std::stoull(word) > 0) {
    policy.every = std::stoull(word);
    return policy;
  }
  return Fault{"--matrices", "'" + word + "' is unknown", "every, a number N, flagged or never"};
}

class Replay {
 public:
  Replay(Settings settings, MatricesPolicy matrices, fs::path directory)
      : engine_(std::move(settings)),
        lines_(engine_.descriptions(), matrices),
        directory_(std::move(directory)),
        estimates_(directory_ / "estimates.jsonl", std::ios::binary),
        flags_(directory_ / "flags.jsonl", std::ios::binary) {
    engine_.set_matrices(matrices);
    for (const PanelDescription& panel : engine_.descriptions()) {
      tallies_.emplace_back(panel.horizons.size());
    }
  }

  bool writable() const { return estimates_.good() && flags_.good(); }
  Engine& engine() { return engine_; }

  // Takes one sample; the refusal says why not.
  const Refusal& take(const SampleEvent& event) {
    engine_.step(event, actions_);
    for (const Record& record : actions_.records) {
      if (const EstimateRecord* estimate = std::get_if<EstimateRecord>(&record)) {
        note(*estimate);
        estimates_ << lines_.line(record) << '\n';
      } else {
        note(*std::get_if<FlagRecord>(&record));
        flags_ << lines_.line(record) << '\n';
      }
    }
    return actions_.refusal;
  }

  bool finish() {
    RecordLines whole(engine_.descriptions(), {});
    std::ofstream last(directory_ / "last.jsonl", std::ios::binary);
    for (std::uint32_t k = 0; k < tallies_.size(); ++k) {
      for (std::uint32_t h = 0; h < tallies_[k].size(); ++h) {
        last << whole.line(engine_.latest(k, h)) << '\n';
      }
    }
    std::ofstream report(directory_ / "report.txt", std::ios::binary);
    write_report(report);
    for (std::ofstream* file : {&estimates_, &flags_, &last, &report}) {
      file->flush();
      if (!file->good()) return false;
    }
    return true;
  }

 private:
  void note(const EstimateRecord& record) {
    Tally& tally = tallies_[record.panel][record.horizon];
    tally.last.estimate = record.estimate;
    tally.live += record.estimate.state == HorizonState::live;
    tally.scored += !std::isnan(record.estimate.p_value);
    if (record.estimate.state == HorizonState::live) {
      tally.nu_least = std::min(tally.nu_least, record.estimate.nu);
      tally.nu_most = std::max(tally.nu_most, record.estimate.nu);
    }
  }

  void note(const FlagRecord& record) {
    Tally& tally = tallies_[record.panel][record.horizon];
    ++tally.flags;
    tally.severe += record.flag.severity == Severity::severe;
    worst_.push_back({record});
    std::stable_sort(worst_.begin(), worst_.end(), [](const Worst& a, const Worst& b) {
      return a.record.flag.p_value < b.record.flag.p_value;
    });
    if (worst_.size() > 10) worst_.resize(10);
  }

  void write_report(std::ostream& out) const {
    const EngineCounters& counters = engine_.counters();
    out << "samples accepted " << counters.accepted << ", refused " << counters.refused << "\n";
    for (std::size_t k = 1; k < counters.refused_by_reason.size(); ++k) {
      if (counters.refused_by_reason[k] > 0) {
        out << "  " << name_of(static_cast<RefusalReason>(k)) << " "
            << counters.refused_by_reason[k] << "\n";
      }
    }
    for (std::size_t k = 0; k < tallies_.size(); ++k) {
      const PanelDescription& panel = engine_.descriptions()[k];
      const double rate = engine_.settings().panels[k].core.flags.rate;
      for (std::size_t h = 0; h < tallies_[k].size(); ++h) {
        const Tally& tally = tallies_[k][h];
        const Estimate& e = tally.last.estimate;
        out << "\n" << panel.name << "/" << panel.horizons[h] << ": " << name_of(e.state);
        if (e.reason != StateReason::none) out << " (" << name_of(e.reason) << ")";
        out << ", live for " << tally.live << " samples\n";
        if (tally.live == 0) continue;
        out << "  degrees of freedom now "
            << nu_text(e.nu, e.nu_low, e.nu_high, name_of(e.nu_status)) << ", over the run "
            << short_number(tally.nu_least) << " to " << short_number(tally.nu_most) << "\n"
            << "  covariance = "
            << (e.nu > 2 ? short_number(e.covariance_factor) + " x scatter"
                         : std::string("not defined at nu <= 2"))
            << "; residual " << short_number(e.residual) << "\n"
            << "  flags " << tally.flags << " (expected "
            << short_number(rate * static_cast<double>(tally.scored)) << " at rate "
            << short_number(rate) << "), severe " << tally.severe << "\n";
      }
    }
    if (!worst_.empty()) out << "\nleast likely samples\n";
    for (const Worst& worst : worst_) {
      const FlagRecord& record = worst.record;
      const PanelDescription& panel = engine_.descriptions()[record.panel];
      out << "  " << format_time(record.time_ns) << "  " << panel.name << "/"
          << panel.horizons[record.horizon] << "  p " << short_number(record.flag.p_value);
      if (!record.flag.channels.empty()) {
        const ChannelBlame& first = record.flag.channels.front();
        out << "  " << panel.channels[static_cast<std::size_t>(first.channel)] << " "
            << short_number(first.residual) << " conditional units";
      }
      out << "\n";
    }
    out << "\nThese numbers come from a model. Keep independent limits before anything acts on "
           "them.\n";
  }

  Engine engine_;
  RecordLines lines_;
  fs::path directory_;
  std::ofstream estimates_, flags_;
  Actions actions_;
  std::vector<std::vector<Tally>> tallies_;
  std::vector<Worst> worst_;
};

// place[k]: column of the recording that holds the settings' channel k.
Result<std::vector<std::size_t>> match(const Settings& settings, const RecordingReader& reader) {
  std::vector<std::size_t> place;
  for (const ChannelSettings& channel : settings.channels) {
    const auto found = std::find(reader.channels().begin(), reader.channels().end(), channel.name);
    if (found == reader.channels().end()) {
      return Fault{reader.name(), "the recording has no channel '" + channel.name + "'",
                   "a column for every channel of the settings"};
    }
    place.push_back(static_cast<std::size_t>(found - reader.channels().begin()));
  }
  return place;
}

std::optional<Fault> prepare(const ReplayOptions& options) {
  std::error_code error;
  fs::create_directories(options.directory, error);
  if (error)
    return Fault{options.directory, "cannot make this directory: " + error.message(), "--into DIR"};
  if (!options.overwrite && !fs::is_empty(options.directory, error)) {
    return Fault{options.directory, "the directory is not empty", "an empty one, or --overwrite"};
  }
  return {};
}

}  // namespace

int run_replay(const ReplayOptions& options) {
  Result<Settings> settings = load_settings(options.settings);
  if (!settings) return complain(settings.fault(), kBadSettings);
  Result<MatricesPolicy> policy = matrices_policy(options.matrices);
  if (!policy) return complain(policy.fault(), kUsage);
  Result<RecordingReader> reader = RecordingReader::open(options.recording);
  if (!reader) return complain(reader.fault(), kBadData);
  Result<std::vector<std::size_t>> place = match(settings.value(), reader.value());
  if (!place) return complain(place.fault(), kBadData);
  if (std::optional<Fault> fault = prepare(options)) return complain(*fault, kIoError);
  Replay replay(settings.value(), policy.value(), options.directory);
  if (!replay.writable()) {
    return complain({options.directory, "cannot write here", "a writable directory"}, kIoError);
  }
  Progress progress("replay");
  SampleEvent event;
  event.values.resize(place.value().size());
  for (std::uint64_t count = 0;; ++count) {
    Result<std::optional<RecordedSample>> next = reader.value().next();
    if (!next) return complain(next.fault(), kBadData);
    if (!next.value()) break;
    event.time_ns = next.value()->time_ns;
    for (std::size_t k = 0; k < event.values.size(); ++k) {
      event.values[k] = next.value()->values[place.value()[k]];
    }
    const Refusal& refusal = replay.take(event);
    if (refusal.reason != RefusalReason::none && !options.keep_going) {
      const Fault fault{options.recording + ":" + std::to_string(next.value()->line),
                        refusal.fault.line(), "or --keep-going to count and go on"};
      return complain(fault, kBadData);
    }
    if (count % 64 == 0) {
      progress.show(reader.value().position(), reader.value().size(),
                    std::to_string(count) + " samples");
    }
  }
  if (!replay.finish()) {
    return complain({options.directory, "writing failed", "room on the disk"}, kIoError);
  }
  const EngineCounters& counters = replay.engine().counters();
  std::printf("%llu samples replayed, %llu refused; records and report.txt in %s\n",
              static_cast<unsigned long long>(counters.accepted),
              static_cast<unsigned long long>(counters.refused), options.directory.c_str());
  return kOk;
}

}  // namespace tailweir

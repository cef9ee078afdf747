// tailweir send: plays a recording into a daemon, acknowledged, paced or as fast as it goes.

#include <chrono>
#include <cstdio>
#include <deque>
#include <memory>
#include <thread>

#include "service/commands/commands.h"
#include "service/commands/terminal.h"
#include "service/intake/recording.h"
#include "service/intake/sender.h"
#include "service/scenario/saltmarch.h"

namespace tailweir {
namespace {

// "100ms", "2s", "500us"; zero when empty.
Result<std::chrono::microseconds> pace(const std::string& text) {
  if (text.empty()) return std::chrono::microseconds(0);
  char* end = nullptr;
  const double value = std::strtod(text.c_str(), &end);
  const std::string unit(end);
  const double factor = unit == "us" ? 1 : unit == "ms" ? 1e3 : unit == "s" ? 1e6 : 0;
  if (factor == 0 || !(value > 0) || !(value * factor < 1e12)) {
    return Fault{"--every", "'" + text + "' is not a pace", "a time such as 500us, 100ms, 2s"};
  }
  return std::chrono::microseconds(static_cast<std::int64_t>(value * factor));
}

// Where samples come from: a recording or a generator.
class Source {
 public:
  virtual ~Source() = default;
  virtual const std::vector<std::string>& channels() const = 0;
  virtual Result<std::optional<RecordedSample>> next() = 0;
  virtual std::uint64_t done() const = 0;
  virtual std::uint64_t total() const = 0;
  virtual std::string place(std::uint64_t line) const = 0;
};

class FileSource : public Source {
 public:
  explicit FileSource(RecordingReader reader) : reader_(std::move(reader)) {}
  const std::vector<std::string>& channels() const override { return reader_.channels(); }
  Result<std::optional<RecordedSample>> next() override { return reader_.next(); }
  std::uint64_t done() const override { return reader_.position(); }
  std::uint64_t total() const override { return reader_.size(); }
  std::string place(std::uint64_t line) const override {
    return reader_.name() + ":" + std::to_string(line);
  }

 private:
  RecordingReader reader_;
};

class InventedSource : public Source {
 public:
  InventedSource(std::uint64_t seed, std::uint64_t samples)
      : scenario_(seed), samples_(samples == 0 ? scenario_.length() : samples) {}
  const std::vector<std::string>& channels() const override { return scenario_.channels(); }
  Result<std::optional<RecordedSample>> next() override {
    if (made_ == samples_) return std::optional<RecordedSample>();
    RecordedSample sample;
    scenario_.next(sample.time_ns, sample.values);
    sample.line = ++made_;
    return std::optional<RecordedSample>(std::move(sample));
  }
  std::uint64_t done() const override { return made_; }
  std::uint64_t total() const override { return samples_; }
  std::string place(std::uint64_t line) const override { return "sample " + std::to_string(line); }

 private:
  SaltmarchScenario scenario_;
  std::uint64_t samples_, made_ = 0;
};

Result<std::unique_ptr<Source>> open_source(const SendOptions& options) {
  if (!options.invent.empty()) {
    if (options.invent != "saltmarch") {
      return Fault{"--invent", "'" + options.invent + "' is unknown", "saltmarch"};
    }
    return std::unique_ptr<Source>(new InventedSource(options.seed, options.samples));
  }
  Result<RecordingReader> reader = RecordingReader::open(options.recording);
  if (!reader) return reader.fault();
  return std::unique_ptr<Source>(new FileSource(std::move(reader.value())));
}

int play(Source& source, Sender& sender, const SendOptions& options,
         std::chrono::microseconds every) {
  std::uint64_t sent = 0;
  bool refused = false;
  std::deque<std::uint64_t> lines;  // of samples not answered yet
  std::uint64_t first_line = 0;     // index of lines.front()
  sender.on_refusal = [&](std::uint64_t index, const wire::RefusalNote& note) {
    refused = true;
    const std::uint64_t at = index - first_line;
    const std::string where = at < lines.size() ? source.place(lines[at]) : "sample";
    std::fprintf(stderr, "tailweir: %s: refused: %s\n", where.c_str(), note.text.c_str());
  };
  Progress progress("send");
  auto due = std::chrono::steady_clock::now();
  for (;;) {
    Result<std::optional<RecordedSample>> next = source.next();
    if (!next) return complain(next.fault(), kBadData);
    if (!next.value()) break;
    if (every.count() > 0) {
      std::this_thread::sleep_until(due);
      due += every;
    }
    lines.push_back(next.value()->line);
    Result<bool> ok = sender.send(next.value()->time_ns, next.value()->values);
    if (ok && every.count() > 0) ok = sender.flush();
    if (!ok) return complain(ok.fault(), kUnavailable);
    while (first_line < sender.acknowledged()) {
      lines.pop_front();
      ++first_line;
    }
    if (refused && !options.keep_going) break;
    if (++sent % 64 == 0 || every.count() > 0) {
      progress.show(source.done(), source.total(), std::to_string(sent) + " samples");
    }
  }
  Result<bool> ok = sender.flush();
  if (!ok) return complain(ok.fault(), kUnavailable);
  std::printf("%llu samples acknowledged, %llu of them refused\n",
              static_cast<unsigned long long>(sender.acknowledged()),
              static_cast<unsigned long long>(sender.refused()));
  return refused && !options.keep_going ? kBadData : kOk;
}

}  // namespace

int run_send(const SendOptions& options) {
  if (options.recording.empty() == options.invent.empty()) {
    return complain({"send", "needs one source", "either --from RECORDING or --invent saltmarch"},
                    kUsage);
  }
  Result<std::chrono::microseconds> every = pace(options.every);
  if (!every) return complain(every.fault(), kUsage);
  Result<std::unique_ptr<Source>> source = open_source(options);
  if (!source) return complain(source.fault(), options.invent.empty() ? kBadData : kUsage);
  Sender::Options how;
  if (every.value().count() > 0) how.batch = 1;
  Sender sender(options.address, options.name, source.value()->channels(), how);
  Result<std::uint64_t> connected = sender.connect();
  if (!connected) return complain(connected.fault(), kUnavailable);
  return play(*source.value(), sender, options, every.value());
}

}  // namespace tailweir

// The sending end of the acknowledged protocol: hello, samples in batches, acks, resending.
//
// Samples are numbered from what the daemon expects next; at most `window` wait for their ack. When
// the daemon goes away they are sent again after the next welcome; a daemon that has forgotten (no
// store) gets them renumbered. Thread rule: created, used and closed in one thread.
#pragma once

#include <chrono>
#include <cstdint>
#include <deque>
#include <functional>
#include <memory>
#include <string>
#include <vector>

#include "core/result.h"
#include "service/wire/messages.h"

namespace tailweir {

class Sender {
 public:
  struct Options {
    std::size_t window = 4096;
    std::size_t batch = 64;
    std::chrono::milliseconds patience{10000};  // without any answer
  };
  Sender(const std::string& address, std::string name, std::vector<std::string> channels,
         Options options);
  ~Sender();

  // Says hello and waits. Fault when nobody answers in time or the daemon refuses the channels.
  Result<std::uint64_t> connect();
  // Queues a sample, sends what is due, waits while the window is full.
  Result<bool> send(std::int64_t time_ns, const std::vector<double>& values);
  // Sends what is queued and waits until everything is acknowledged or refused.
  Result<bool> flush();

  // Called for every refused sample: how many samples of this sender were sent before it, reason,
  // text.
  std::function<void(std::uint64_t index, const wire::RefusalNote& note)> on_refusal;

  std::uint64_t acknowledged() const { return acknowledged_; }
  std::uint64_t refused() const { return refused_; }

 private:
  struct Body;
  Result<bool> hello();
  void send_due(bool all);
  Result<bool> receive(std::chrono::milliseconds wait);
  Result<bool> wait_until(std::size_t most_waiting);

  std::string address_, name_;
  std::vector<std::string> channels_;
  std::uint32_t hash_;
  Options options_;
  std::unique_ptr<Body> body_;
  std::deque<wire::WireSample> waiting_;  // sequence relative to base_
  std::size_t sent_ = 0;                  // of waiting_, from the front
  std::uint64_t next_ = 1;                // sequence of the next sample queued
  std::uint64_t first_ = 1;               // sequence of the very first sample
  std::uint64_t acknowledged_ = 0, refused_ = 0;
  bool welcome_ = false;
  bool ever_connected_ = false;
};

}  // namespace tailweir

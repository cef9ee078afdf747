// What goes out: one XPUB socket, a welcome with the description for late joiners, numbered
// messages.
//
// Thread rule: created, used and closed in one thread.
#pragma once

#include <cstdint>
#include <map>
#include <memory>
#include <string>
#include <vector>

#include "core/result.h"
#include "service/engine/engine.h"
#include "service/report/record_lines.h"
#include "service/wire/messages.h"

namespace zmq {
class context_t;
class socket_t;
}  // namespace zmq

namespace tailweir {

class Publisher {
 public:
  Publisher(std::vector<PanelDescription> descriptions, std::uint64_t epoch);
  ~Publisher();

  // Binds; Fault when the address is taken or wrong.
  Result<std::string> bind(zmq::context_t& context, const std::string& address);
  void close();

  void publish(const std::vector<Record>& records);
  void pulse(const wire::Pulse& pulse, std::int64_t wall_ns);
  // Takes in subscriptions, so that newcomers get their welcome. Call when the socket is readable.
  void serve_subscriptions();
  // The raw socket, for polling.
  void* handle();

 private:
  void send(const std::string& frame);

  std::vector<PanelDescription> descriptions_;
  std::uint64_t epoch_;
  RecordLines lines_;
  std::unique_ptr<zmq::socket_t> socket_;
  std::vector<std::vector<std::uint32_t>> estimate_numbers_;
  std::vector<std::uint32_t> flag_numbers_, alert_numbers_;
  std::uint32_t pulse_number_ = 0;
};

}  // namespace tailweir

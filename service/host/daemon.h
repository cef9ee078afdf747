// The running daemon: sockets in, engine, sockets out, in one thread of its own.
//
// One loop polls the intake (ROUTER, SUBs), the publisher (XPUB) and a stop signal; the engine runs
// in it, so what is published follows from what was taken in, in order. Wall-clock time appears in
// the pulse and in the log only. Thread rule: start and stop from one thread; the loop owns
// everything else.
#pragma once

#include <memory>
#include <string>

#include "core/result.h"
#include "service/settings/settings.h"

namespace tailweir {

class Daemon {
 public:
  Daemon();
  ~Daemon();  // stops

  // Binds and starts. Fault when an address cannot be bound; nothing runs then.
  Result<bool> start(const Settings& settings);
  // Finishes what has been received, acknowledges, publishes, closes. Returns within a second.
  void stop();

  // Addresses really bound (a port given as * is chosen by the system); empty when not bound.
  std::string intake_address() const;
  std::string publish_address() const;
  // Samples accepted so far.
  std::uint64_t accepted() const;

 private:
  struct Body;
  std::unique_ptr<Body> body_;
};

}  // namespace tailweir

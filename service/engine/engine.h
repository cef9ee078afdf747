// The sample's way, without sockets, clock or disk: step(event) -> actions.
//
// Feeds arrive as events; the engine checks order and content, turns levels into changes, pushes
// every panel and returns what is to be published, acknowledged or refused. Live and offline use
// this same class, so the same recording gives the same records to the byte. Thread rule: one
// engine belongs to one thread. It does no I/O and reads no clock.
#pragma once

#include <cstdint>
#include <memory>
#include <string>
#include <vector>

#include "service/engine/records.h"
#include "service/settings/settings.h"

namespace tailweir {

// One sample as a sender gave it: a value per channel of the settings, NaN where missing.
struct SampleEvent {
  std::string sender;                 // empty for plain feeds and recordings without a name
  std::uint64_t sender_sequence = 0;  // counted by the sender from 1; 0 where there is none
  std::int64_t time_ns = 0;
  std::vector<double> values;  // one per settings channel, in the settings' order
};

// Which records carry matrices.
struct MatricesPolicy {
  enum class Kind { every, flagged, never };
  Kind kind = Kind::every;
  std::uint64_t every = 1;  // for Kind::every: samples whose sequence is a multiple of it

  bool wants(std::uint64_t sequence, bool flagged) const {
    if (kind == Kind::never) return false;
    return kind == Kind::flagged ? flagged : sequence % every == 0;
  }
};

// Why a sample was not taken; stable numbers (they go on the wire).
enum class RefusalReason : std::uint32_t {
  none = 0,
  wrong_count = 1,     // not one value per channel
  not_finite = 2,      // an infinite value
  missing = 3,         // every value is missing
  time_backwards = 4,  // earlier than the last accepted sample
  not_positive = 5,    // a level <= 0 that is to enter as a log difference
  out_of_range = 6,    // |value| above 1e150, or between 0 and 1e-150
  sequence_gap = 7,    // sender sequence beyond the next expected: the sender goes back
  bad_frame = 8        // damaged or foreign frame: never reaches the engine, counted by intake
};
const char* name_of(RefusalReason reason);

struct Refusal {
  RefusalReason reason = RefusalReason::none;
  Fault fault;  // one line for people
};

// What one step asks the outside to do.
struct Actions {
  std::vector<Record> records;  // to publish, in order
  bool accepted = false;        // the sample counts as received (also for a duplicate)
  bool duplicate = false;       // seen before: acknowledge again, publish nothing
  Refusal refusal;              // reason none when accepted
  void clear();
};

struct EngineCounters {
  std::uint64_t accepted = 0, duplicates = 0, refused = 0;
  std::vector<std::uint64_t> refused_by_reason;  // indexed by RefusalReason
};

class Engine {
 public:
  // Precondition: settings came out of load_settings() or validate().
  explicit Engine(Settings settings);
  ~Engine();
  Engine(Engine&&) noexcept;

  // Takes one sample. Appends to actions (cleared first). A refusal changes no state but counters
  // and the sender's place: the next sequence is expected, as the same sample would be refused
  // again.
  void step(const SampleEvent& event, Actions& actions);

  // Which estimate records carry scatter and centre (they dominate the cost when nobody reads
  // them); latest() gives them on demand. Default: every one.
  void set_matrices(const MatricesPolicy& policy);

  const Settings& settings() const;
  const std::vector<PanelDescription>& descriptions() const;
  const EngineCounters& counters() const;
  std::uint64_t sequence() const;  // of the last accepted sample
  std::int64_t last_time_ns() const;
  // Next sequence expected of a sender (1 for an unknown one).
  std::uint64_t next_of(const std::string& sender) const;
  // Latest estimate of a panel's horizon, with scatter and centre when it has them.
  EstimateRecord latest(std::uint32_t panel, std::uint32_t horizon) const;

 private:
  struct Body;
  std::unique_ptr<Body> body_;
};

}  // namespace tailweir

// The receiving end of what a daemon publishes: decodes, describes, notices losses.
//
// Thread rule: created, used and closed in one thread.
#pragma once

#include <chrono>
#include <cstdint>
#include <map>
#include <memory>
#include <optional>
#include <string>
#include <variant>
#include <vector>

#include "core/result.h"
#include "service/engine/records.h"
#include "service/wire/messages.h"

namespace tailweir {

class Subscriber {
 public:
  // What arrived: one of these, and the frame's header.
  struct FlagLine {
    std::string json;  // as replay writes it
  };
  struct AlertLine {
    std::string json;  // as replay writes it
  };
  struct PulseText {
    std::string json;
  };
  struct Message {
    wire::Header header;
    std::variant<EstimateRecord, FlagLine, AlertLine, PulseText, std::vector<PanelDescription>>
        content;
  };

  // topic: a prefix such as "estimate/metals"; empty for everything.
  Subscriber(const std::string& address, const std::string& topic);
  ~Subscriber();

  Result<bool> open();
  // The next message, or nothing when none came in time. Damaged frames are counted, not returned.
  std::optional<Message> next(std::chrono::milliseconds wait);

  const std::vector<PanelDescription>& panels() const { return panels_; }
  std::uint64_t lost() const { return lost_; }
  std::uint64_t damaged() const { return damaged_; }

 private:
  struct Body;
  void watch(const wire::View& view);

  std::string address_, topic_;
  std::unique_ptr<Body> body_;
  std::vector<PanelDescription> panels_;
  std::map<std::string, std::uint32_t, std::less<>> numbers_;
  std::uint64_t epoch_ = 0, lost_ = 0, damaged_ = 0;
};

}  // namespace tailweir

// The intake's side of the conversation with senders, without sockets: bytes in, bytes out.
//
// Acknowledged senders say hello (name, channel names), get the next sequence expected, send
// samples and get cumulative acknowledgements or refusals. Plain feeds only send samples; gaps in
// their sequence are counted as lost. Whatever comes from outside is checked before it reaches the
// engine. Thread rule: one owner, the engine's thread.
#pragma once

#include <cstdint>
#include <functional>
#include <map>
#include <string>
#include <string_view>
#include <vector>

#include "service/engine/engine.h"

namespace tailweir {

class IntakeDesk {
 public:
  // publish: called with the records of each accepted sample, in order.
  using Publish = std::function<void(const std::vector<Record>&)>;
  IntakeDesk(Engine& engine, std::uint64_t epoch, Publish publish);

  // One frame from the peer `identity`; returns the frames to send back to it.
  std::vector<std::string> from_peer(const std::string& identity, std::string_view frame);
  // One frame from plain feed number `feed`.
  void from_plain_feed(std::size_t feed, std::string_view frame);
  // A message that was not one frame.
  void note_bad_message();

  std::uint64_t bad_frames() const { return bad_frames_; }
  std::uint64_t lost() const { return lost_; }
  // A line for the log when something new went wrong since the last call; empty otherwise.
  std::string take_complaint();

 private:
  struct Peer {
    std::string sender;
    std::vector<std::size_t> place;  // place[k]: settings channel of the sender's k-th value
    std::uint32_t hash = 0;
  };
  std::vector<std::string> hello(const std::string& identity, std::string_view frame);
  bool map_channels(const std::vector<std::string>& names, Peer& peer, Fault& fault) const;
  void complain(const std::string& text);

  Engine& engine_;
  std::uint64_t epoch_;
  Publish publish_;
  std::map<std::string, Peer> peers_;
  std::map<std::size_t, std::uint64_t> plain_next_;
  std::uint32_t plain_hash_ = 0;
  Actions actions_;
  SampleEvent event_;
  std::uint64_t bad_frames_ = 0, lost_ = 0;
  std::string complaint_;
};

}  // namespace tailweir

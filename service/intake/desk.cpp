#include "service/intake/desk.h"

#include <algorithm>

#include "service/wire/messages.h"

namespace tailweir {
namespace {

// Peers remembered at most: identities are chosen by strangers.
constexpr std::size_t kMostPeers = 10000;

}  // namespace

IntakeDesk::IntakeDesk(Engine& engine, std::uint64_t epoch, Publish publish)
    : engine_(engine), epoch_(epoch), publish_(std::move(publish)) {
  std::vector<std::string> names;
  for (const ChannelSettings& channel : engine.settings().channels) names.push_back(channel.name);
  plain_hash_ = wire::channels_hash(names);
}

void IntakeDesk::complain(const std::string& text) {
  if (complaint_.empty()) complaint_ = text;
}

std::string IntakeDesk::take_complaint() {
  std::string text;
  text.swap(complaint_);
  return text;
}

void IntakeDesk::note_bad_message() {
  ++bad_frames_;
  complain("a message of several frames was refused; one frame a message");
}

bool IntakeDesk::map_channels(const std::vector<std::string>& names, Peer& peer,
                              Fault& fault) const {
  const std::vector<ChannelSettings>& channels = engine_.settings().channels;
  for (const std::string& name : names) {
    const auto found = std::find_if(channels.begin(), channels.end(),
                                    [&](const ChannelSettings& c) { return c.name == name; });
    if (found == channels.end()) {
      fault = {"hello", "channel '" + name + "' is not in the settings", "the settings' channels"};
      return false;
    }
    const std::size_t k = static_cast<std::size_t>(found - channels.begin());
    if (std::find(peer.place.begin(), peer.place.end(), k) != peer.place.end()) {
      fault = {"hello", "channel '" + name + "' is named twice", "each channel once"};
      return false;
    }
    peer.place.push_back(k);
  }
  for (std::size_t k = 0; k < channels.size(); ++k) {
    if (std::find(peer.place.begin(), peer.place.end(), k) == peer.place.end()) {
      fault = {"hello", "channel '" + channels[k].name + "' is not sent",
               "all " + std::to_string(channels.size()) + " channels of the settings"};
      return false;
    }
  }
  peer.hash = wire::channels_hash(names);
  return true;
}

std::vector<std::string> IntakeDesk::from_peer(const std::string& identity,
                                               std::string_view frame) {
  Result<wire::View> decoded = wire::decode(frame);
  if (!decoded) {
    ++bad_frames_;
    complain("a frame was refused: " + decoded.fault().line());
    return {wire::encode_refusal({0, name_of(RefusalReason::bad_frame), decoded.fault().line()},
                                 epoch_)};
  }
  const wire::View& view = decoded.value();
  const auto refuse_frame = [&](const Fault& fault) -> std::vector<std::string> {
    ++bad_frames_;
    complain("a frame was refused: " + fault.line());
    return {wire::encode_refusal({0, name_of(RefusalReason::bad_frame), fault.line()}, epoch_)};
  };
  if (view.header.kind == wire::Kind::hello) {
    Result<wire::Hello> hello = wire::decode_hello(view);
    if (!hello) return refuse_frame(hello.fault());
    Peer peer;
    peer.sender = hello.value().sender;
    Fault fault;
    if (!map_channels(hello.value().channels, peer, fault)) return refuse_frame(fault);
    if (peers_.size() >= kMostPeers) peers_.clear();  // they say hello again
    const std::uint64_t next = engine_.next_of(peer.sender);
    peers_[identity] = std::move(peer);
    return {wire::encode_welcome(next, false, epoch_)};
  }
  if (view.header.kind != wire::Kind::samples) {
    return refuse_frame({"frame", "is not for the intake", "hello or samples"});
  }
  const auto known = peers_.find(identity);
  if (known == peers_.end()) {
    return refuse_frame({"frame", "samples came before a hello", "a hello first"});
  }
  const Peer& peer = known->second;
  Result<std::vector<wire::WireSample>> samples = wire::decode_samples(view);
  if (!samples) return refuse_frame(samples.fault());
  if (view.header.channels_version != peer.hash || view.header.channels != peer.place.size()) {
    return refuse_frame({"frame", "names other channels than the hello", "the hello's channels"});
  }
  std::vector<std::string> answers;
  event_.sender = peer.sender;
  event_.values.resize(peer.place.size());
  for (const wire::WireSample& sample : samples.value()) {
    if (sample.sequence == 0) {
      return refuse_frame({"frame", "sample sequence 0", "sequences counted from 1"});
    }
    event_.sender_sequence = sample.sequence;
    event_.time_ns = sample.time_ns;
    for (std::size_t k = 0; k < peer.place.size(); ++k) {
      event_.values[peer.place[k]] = sample.values[k];
    }
    engine_.step(event_, actions_);
    if (actions_.refusal.reason != RefusalReason::none) {
      complain("sample " + std::to_string(sample.sequence) + " of " + peer.sender +
               " was refused: " + actions_.refusal.fault.line());
      answers.push_back(wire::encode_refusal(
          {sample.sequence, name_of(actions_.refusal.reason), actions_.refusal.fault.line()},
          epoch_));
      if (actions_.refusal.reason == RefusalReason::sequence_gap) break;  // the sender goes back
    }
    if (!actions_.records.empty()) publish_(actions_.records);
  }
  const std::uint64_t next = engine_.next_of(peer.sender);
  answers.push_back(wire::encode_ack(next - 1, false, epoch_));
  return answers;
}

void IntakeDesk::from_plain_feed(std::size_t feed, std::string_view frame) {
  Result<wire::View> decoded = wire::decode(frame);
  if (!decoded) {
    ++bad_frames_;
    return complain("a frame of a plain feed was refused: " + decoded.fault().line());
  }
  const wire::View& view = decoded.value();
  if (view.header.kind != wire::Kind::samples) return;  // other topics of the same publisher
  Result<std::vector<wire::WireSample>> samples = wire::decode_samples(view);
  if (!samples || view.header.channels_version != plain_hash_) {
    ++bad_frames_;
    return complain(
        "a frame of a plain feed was refused: " +
        (samples ? "other channels than the settings, in their order" : samples.fault().line()));
  }
  for (wire::WireSample& sample : samples.value()) {
    std::uint64_t& next = plain_next_[feed];
    if (next > 0 && sample.sequence > next) {
      lost_ += sample.sequence - next;
      complain(std::to_string(sample.sequence - next) + " samples of a plain feed were lost");
    }
    if (next > 0 && sample.sequence < next && sample.sequence > 1) continue;  // seen
    next = sample.sequence + 1;
    event_.sender.clear();
    event_.sender_sequence = 0;
    event_.time_ns = sample.time_ns;
    event_.values = std::move(sample.values);
    engine_.step(event_, actions_);
    if (actions_.refusal.reason != RefusalReason::none) {
      complain("a sample of a plain feed was refused: " + actions_.refusal.fault.line());
    }
    if (!actions_.records.empty()) publish_(actions_.records);
  }
}

}  // namespace tailweir

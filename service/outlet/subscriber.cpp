#include "service/outlet/subscriber.h"

#include <zmq.hpp>

namespace tailweir {

struct Subscriber::Body {
  zmq::context_t context{1};
  zmq::socket_t socket{context, zmq::socket_type::sub};
};

Subscriber::Subscriber(const std::string& address, const std::string& topic)
    : address_(address), topic_(topic), body_(std::make_unique<Body>()) {}

Subscriber::~Subscriber() = default;

Result<bool> Subscriber::open() {
  try {
    body_->socket.set(zmq::sockopt::rcvhwm, 0);
    body_->socket.set(zmq::sockopt::linger, 0);
    body_->socket.set(zmq::sockopt::reconnect_ivl, 20);
    body_->socket.set(zmq::sockopt::reconnect_ivl_max, 1000);
    body_->socket.set(zmq::sockopt::maxmsgsize, static_cast<std::int64_t>(wire::kLargestFrame));
    body_->socket.set(zmq::sockopt::subscribe, topic_);
    if (!topic_.empty()) body_->socket.set(zmq::sockopt::subscribe, "describe");
    body_->socket.connect(address_);
  } catch (const zmq::error_t& error) {
    return Fault{address_, std::string("cannot connect: ") + error.what(),
                 "tcp://HOST:PORT or ipc://PATH"};
  }
  return true;
}

// A number that is not one above the last of its topic means that messages were dropped.
void Subscriber::watch(const wire::View& view) {
  if (view.header.epoch != epoch_) {
    epoch_ = view.header.epoch;
    numbers_.clear();
  }
  if (view.header.number == 0) return;
  const auto [found, fresh] = numbers_.try_emplace(std::string(view.topic), view.header.number);
  if (fresh) return;
  lost_ += view.header.number - found->second - 1;
  found->second = view.header.number;
}

std::optional<Subscriber::Message> Subscriber::next(std::chrono::milliseconds wait) {
  const auto end = std::chrono::steady_clock::now() + wait;
  zmq::message_t message;
  for (;;) {
    const auto left = std::chrono::duration_cast<std::chrono::milliseconds>(
        end - std::chrono::steady_clock::now());
    zmq::pollitem_t item{body_->socket.handle(), 0, ZMQ_POLLIN, 0};
    if (zmq::poll(&item, 1, std::max(left, std::chrono::milliseconds(0))) == 0) return {};
    if (!body_->socket.recv(message, zmq::recv_flags::dontwait)) return {};
    Result<wire::View> decoded = wire::decode(message.to_string_view());
    if (!decoded) {
      ++damaged_;
      continue;
    }
    const wire::View& view = decoded.value();
    watch(view);
    Message result;
    result.header = view.header;
    switch (view.header.kind) {
      case wire::Kind::description: {
        Result<std::vector<PanelDescription>> panels = wire::decode_description(view);
        if (!panels) break;
        panels_ = panels.value();
        result.content = panels.value();
        return result;
      }
      case wire::Kind::estimate: {
        Result<EstimateRecord> record = wire::decode_estimate(view);
        // Until the description is here, indices mean nothing.
        if (!record || record.value().panel >= panels_.size() ||
            record.value().horizon >= panels_[record.value().panel].horizons.size()) {
          break;
        }
        result.content = record.value();
        return result;
      }
      case wire::Kind::flag:
        result.content = FlagLine{std::string(view.payload)};
        return result;
      case wire::Kind::alert:
        result.content = AlertLine{std::string(view.payload)};
        return result;
      case wire::Kind::pulse:
        result.content = PulseText{std::string(view.payload)};
        return result;
      default:
        continue;
    }
    ++damaged_;
  }
}

}  // namespace tailweir

#include "service/outlet/publisher.h"

#include <zmq.hpp>

namespace tailweir {
namespace {

// Messages waiting for one slow subscriber before its newest are dropped (and seen as a gap there).
constexpr int kHighWater = 100000;

}  // namespace

Publisher::Publisher(std::vector<PanelDescription> descriptions, std::uint64_t epoch)
    : descriptions_(std::move(descriptions)), epoch_(epoch), lines_(descriptions_, {}) {
  for (const PanelDescription& panel : descriptions_) {
    estimate_numbers_.emplace_back(panel.horizons.size(), 0);
    flag_numbers_.push_back(0);
    alert_numbers_.push_back(0);
  }
}

Publisher::~Publisher() = default;

Result<std::string> Publisher::bind(zmq::context_t& context, const std::string& address) {
  try {
    socket_ = std::make_unique<zmq::socket_t>(context, zmq::socket_type::xpub);
    socket_->set(zmq::sockopt::sndhwm, kHighWater);
    socket_->set(zmq::sockopt::linger, 300);
    const std::string welcome = wire::encode_description(descriptions_, epoch_);
    // cppzmq offers no setter for this option that takes bytes.
    zmq_setsockopt(socket_->handle(), ZMQ_XPUB_WELCOME_MSG, welcome.data(), welcome.size());
    socket_->bind(address);
    return socket_->get(zmq::sockopt::last_endpoint);
  } catch (const zmq::error_t& error) {
    socket_.reset();
    return Fault{address, std::string("cannot publish here: ") + error.what(),
                 "a free address in publish: {address: ...}"};
  }
}

void Publisher::close() { socket_.reset(); }

void Publisher::send(const std::string& frame) {
  if (socket_) socket_->send(zmq::buffer(frame), zmq::send_flags::dontwait);
}

void Publisher::publish(const std::vector<Record>& records) {
  if (!socket_) return;
  for (const Record& record : records) {
    if (const EstimateRecord* estimate = std::get_if<EstimateRecord>(&record)) {
      send(wire::encode_estimate(*estimate, descriptions_[estimate->panel], epoch_,
                                 ++estimate_numbers_[estimate->panel][estimate->horizon]));
      continue;
    }
    if (const AlertRecord* alert = std::get_if<AlertRecord>(&record)) {
      wire::Header header;
      header.kind = wire::Kind::alert;
      header.epoch = epoch_;
      header.sequence = alert->sequence;
      header.time_ns = alert->time_ns;
      header.channels = static_cast<std::uint32_t>(descriptions_[alert->panel].channels.size());
      header.number = ++alert_numbers_[alert->panel];
      send(wire::encode(wire::alert_topic(descriptions_[alert->panel]), header,
                        lines_.line(*alert)));
      continue;
    }
    const FlagRecord& flag = *std::get_if<FlagRecord>(&record);
    wire::Header header;
    header.kind = wire::Kind::flag;
    header.epoch = epoch_;
    header.sequence = flag.sequence;
    header.time_ns = flag.time_ns;
    header.channels = static_cast<std::uint32_t>(descriptions_[flag.panel].channels.size());
    header.number = ++flag_numbers_[flag.panel];
    send(wire::encode(wire::flag_topic(descriptions_[flag.panel]), header, lines_.line(flag)));
  }
}

void Publisher::pulse(const wire::Pulse& pulse, std::int64_t wall_ns) {
  send(wire::encode_pulse(pulse, wall_ns, epoch_, ++pulse_number_));
}

void Publisher::serve_subscriptions() {
  zmq::message_t message;
  while (socket_ && socket_->recv(message, zmq::recv_flags::dontwait)) {
  }
}

void* Publisher::handle() { return socket_ ? socket_->handle() : nullptr; }

}  // namespace tailweir

#include "service/intake/sender.h"

#include <zmq.hpp>

namespace tailweir {
namespace {

using Clock = std::chrono::steady_clock;
// An answer that does not come in this time: say hello again.
constexpr std::chrono::milliseconds kRetry{500};

}  // namespace

struct Sender::Body {
  zmq::context_t context{1};
  std::unique_ptr<zmq::socket_t> socket;
};

Sender::Sender(const std::string& address, std::string name, std::vector<std::string> channels,
               Options options)
    : address_(address),
      name_(std::move(name)),
      channels_(std::move(channels)),
      hash_(wire::channels_hash(channels_)),
      options_(options),
      body_(std::make_unique<Body>()) {}

Sender::~Sender() = default;

Result<bool> Sender::hello() {
  welcome_ = false;
  sent_ = 0;
  try {
    // A fresh socket forgets what was queued for a peer that went away.
    body_->socket = std::make_unique<zmq::socket_t>(body_->context, zmq::socket_type::dealer);
    body_->socket->set(zmq::sockopt::linger, 0);
    body_->socket->set(zmq::sockopt::reconnect_ivl, 20);
    body_->socket->set(zmq::sockopt::reconnect_ivl_max, 1000);
    body_->socket->connect(address_);
    body_->socket->send(zmq::buffer(wire::encode_hello({name_, channels_})),
                        zmq::send_flags::dontwait);
  } catch (const zmq::error_t& error) {
    return Fault{address_, std::string("cannot connect: ") + error.what(),
                 "tcp://HOST:PORT or ipc://PATH"};
  }
  return true;
}

Result<std::uint64_t> Sender::connect() {
  const auto end = Clock::now() + options_.patience;
  while (!welcome_) {
    Result<bool> said = hello();
    if (!said) return said.fault();
    const auto retry = Clock::now() + kRetry;
    while (!welcome_ && Clock::now() < retry) {
      Result<bool> got = receive(std::chrono::milliseconds(50));
      if (!got) return got.fault();
    }
    if (!welcome_ && Clock::now() >= end) {
      return Fault{address_, "nobody answers", "a running tailweir with feed: {listen: ADDRESS}"};
    }
  }
  return next_;
}

void Sender::send_due(bool all) {
  while (welcome_ && sent_ < waiting_.size() &&
         (all || waiting_.size() - sent_ >= options_.batch)) {
    const std::size_t count = std::min(options_.batch, waiting_.size() - sent_);
    const auto from = waiting_.begin() + static_cast<std::ptrdiff_t>(sent_);
    const std::vector<wire::WireSample> batch(from, from + static_cast<std::ptrdiff_t>(count));
    const std::string frame =
        wire::encode_samples(batch, static_cast<std::uint32_t>(channels_.size()), hash_, 0);
    if (!body_->socket->send(zmq::buffer(frame), zmq::send_flags::dontwait)) return;
    sent_ += count;
  }
}

// Handles the answers that are there, after waiting for one. False when there was none.
Result<bool> Sender::receive(std::chrono::milliseconds wait) {
  zmq::pollitem_t item{body_->socket->handle(), 0, ZMQ_POLLIN, 0};
  zmq::poll(&item, 1, wait);
  zmq::message_t message;
  bool any = false;
  while (body_->socket->recv(message, zmq::recv_flags::dontwait)) {
    any = true;
    Result<wire::View> view = wire::decode(message.to_string_view());
    if (!view) return view.fault();
    const wire::Header& header = view.value().header;
    if (header.kind == wire::Kind::welcome) {
      const std::uint64_t expected = header.sequence;
      welcome_ = true;
      sent_ = 0;
      if (!ever_connected_) {
        ever_connected_ = true;
        next_ = first_ = expected;
        continue;
      }
      while (!waiting_.empty() && waiting_.front().sequence < expected &&
             next_ - waiting_.size() <= expected) {
        waiting_.pop_front();  // taken before the connection broke
        ++acknowledged_;
      }
      // A daemon that has forgotten us counts afresh.
      std::uint64_t sequence = expected;
      for (wire::WireSample& sample : waiting_) sample.sequence = sequence++;
      next_ = sequence;
    } else if (header.kind == wire::Kind::ack) {
      while (!waiting_.empty() && waiting_.front().sequence <= header.sequence) {
        waiting_.pop_front();
        if (sent_ > 0) --sent_;
        ++acknowledged_;
      }
    } else if (header.kind == wire::Kind::refusal) {
      Result<wire::RefusalNote> note = wire::decode_refusal(view.value());
      if (!note) return note.fault();
      if (note.value().reason == "sequence_gap") {
        welcome_ = false;  // somebody else sends under this name, or samples were lost: ask again
        continue;
      }
      if (note.value().sequence == 0) return Fault{address_, note.value().text, ""};
      ++refused_;
      if (on_refusal) on_refusal(note.value().sequence - first_, note.value());
    }
  }
  return any;
}

Result<bool> Sender::wait_until(std::size_t most_waiting) {
  auto end = Clock::now() + options_.patience;
  auto retry = Clock::now() + 4 * kRetry;
  while (waiting_.size() > most_waiting) {
    send_due(true);
    Result<bool> got = receive(std::chrono::milliseconds(20));
    if (!got) return got.fault();
    const auto now = Clock::now();
    if (got.value()) {
      end = now + options_.patience;
      retry = now + 4 * kRetry;
    }
    if (now >= end) {
      return Fault{address_,
                   "the daemon has stopped answering, " + std::to_string(waiting_.size()) +
                       " samples are not acknowledged",
                   "start it again, then send the rest"};
    }
    if (!welcome_ || now >= retry) {
      Result<bool> said = hello();
      if (!said) return said.fault();
      retry = now + 4 * kRetry;
      while (!welcome_ && Clock::now() < now + kRetry) {
        Result<bool> answer = receive(std::chrono::milliseconds(50));
        if (!answer) return answer.fault();
      }
    }
  }
  return true;
}

Result<bool> Sender::send(std::int64_t time_ns, const std::vector<double>& values) {
  waiting_.push_back({next_++, time_ns, values});
  send_due(options_.batch <= 1);
  if (waiting_.size() >= options_.window) return wait_until(options_.window / 2);
  if (waiting_.size() % options_.batch == 0) {
    Result<bool> got = receive(std::chrono::milliseconds(0));
    if (!got) return got.fault();
  }
  return true;
}

Result<bool> Sender::flush() { return wait_until(0); }

}  // namespace tailweir

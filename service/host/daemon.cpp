#include "service/host/daemon.h"

#include <sys/eventfd.h>
#include <unistd.h>

#include <atomic>
#include <chrono>
#include <thread>
#include <vector>
#include <zmq.hpp>

#include "service/host/log.h"
#include "service/intake/desk.h"
#include "service/outlet/publisher.h"

namespace tailweir {
namespace {

using Clock = std::chrono::steady_clock;
constexpr auto kPulseEvery = std::chrono::seconds(1);
// How long stop() keeps taking in what has already arrived.
constexpr auto kDrain = std::chrono::milliseconds(300);
// Messages handled from one socket before the others get their turn.
constexpr int kTurn = 64;

std::int64_t wall_clock_ns() {
  return std::chrono::duration_cast<std::chrono::nanoseconds>(
             std::chrono::system_clock::now().time_since_epoch())
      .count();
}

}  // namespace

struct Daemon::Body {
  explicit Body(const Settings& settings)
      : epoch(static_cast<std::uint64_t>(wall_clock_ns())),
        engine(settings),
        publisher(engine.descriptions(), epoch),
        desk(engine, epoch,
             [this](const std::vector<Record>& records) { publisher.publish(records); }),
        stop_event(eventfd(0, EFD_CLOEXEC)) {}
  ~Body() { close(stop_event); }

  std::optional<Fault> open();
  void loop();
  bool take_from_peers(int most);
  bool take_from_feeds(int most);
  void beat();
  void shut();

  std::uint64_t epoch;
  zmq::context_t context{1};
  Engine engine;
  Publisher publisher;
  IntakeDesk desk;
  std::unique_ptr<zmq::socket_t> router;
  std::vector<zmq::socket_t> feeds;
  std::string intake_address, publish_address;
  int stop_event;
  std::atomic<std::uint64_t> accepted{0};
  std::thread thread;
};

// Sockets are opened in the loop's thread; see start().
std::optional<Fault> Daemon::Body::open() {
  const Settings& settings = engine.settings();
  if (settings.publish_address) {
    Result<std::string> bound = publisher.bind(context, *settings.publish_address);
    if (!bound) return bound.fault();
    publish_address = bound.value();
  }
  std::string address;
  try {
    if (settings.feed.listen) {
      address = *settings.feed.listen;
      router = std::make_unique<zmq::socket_t>(context, zmq::socket_type::router);
      router->set(zmq::sockopt::linger, 300);
      router->set(zmq::sockopt::maxmsgsize, static_cast<std::int64_t>(wire::kLargestFrame));
      router->bind(address);
      intake_address = router->get(zmq::sockopt::last_endpoint);
    }
    for (const std::string& feed : settings.feed.subscribe) {
      address = feed;
      feeds.emplace_back(context, zmq::socket_type::sub);
      feeds.back().set(zmq::sockopt::linger, 0);
      feeds.back().set(zmq::sockopt::maxmsgsize, static_cast<std::int64_t>(wire::kLargestFrame));
      feeds.back().set(zmq::sockopt::subscribe, "samples");
      feeds.back().connect(feed);
    }
  } catch (const zmq::error_t& error) {
    return Fault{address, std::string("cannot open this address: ") + error.what(),
                 "a free address to listen on, a valid one to subscribe to"};
  }
  return {};
}

bool Daemon::Body::take_from_peers(int most) {
  zmq::message_t part;
  int taken = 0;
  for (; taken < most && router; ++taken) {
    if (!router->recv(part, zmq::recv_flags::dontwait)) break;
    const std::string identity = part.to_string();
    std::vector<zmq::message_t> frames;
    while (part.more()) {
      if (!router->recv(part, zmq::recv_flags::dontwait)) break;
      frames.push_back(std::move(part));
      part = zmq::message_t();
      if (!router->get(zmq::sockopt::rcvmore)) break;
    }
    if (frames.size() != 1) {
      desk.note_bad_message();
      continue;
    }
    for (const std::string& answer : desk.from_peer(identity, frames[0].to_string_view())) {
      router->send(zmq::buffer(identity), zmq::send_flags::sndmore | zmq::send_flags::dontwait);
      router->send(zmq::buffer(answer), zmq::send_flags::dontwait);
    }
  }
  return taken > 0;
}

bool Daemon::Body::take_from_feeds(int most) {
  bool any = false;
  zmq::message_t message;
  for (std::size_t k = 0; k < feeds.size(); ++k) {
    for (int taken = 0; taken < most && feeds[k].recv(message, zmq::recv_flags::dontwait);
         ++taken) {
      any = true;
      bool surplus = false;
      while (feeds[k].get(zmq::sockopt::rcvmore)) {
        surplus = true;
        zmq::message_t more;
        if (!feeds[k].recv(more, zmq::recv_flags::dontwait)) break;
      }
      if (surplus) {
        desk.note_bad_message();
      } else {
        desk.from_plain_feed(k, message.to_string_view());
      }
    }
  }
  return any;
}

void Daemon::Body::beat() {
  wire::Pulse pulse;
  const EngineCounters& counters = engine.counters();
  pulse.sequence = engine.sequence();
  pulse.duplicates = counters.duplicates;
  pulse.refused = counters.refused;
  pulse.refused_by_reason = counters.refused_by_reason;
  pulse.lost = desk.lost();
  pulse.bad_frames = desk.bad_frames();
  publisher.pulse(pulse, wall_clock_ns());
}

void Daemon::Body::loop() {
  std::vector<zmq::pollitem_t> items = {{nullptr, stop_event, ZMQ_POLLIN, 0}};
  if (publisher.handle() != nullptr) items.push_back({publisher.handle(), 0, ZMQ_POLLIN, 0});
  if (router) items.push_back({router->handle(), 0, ZMQ_POLLIN, 0});
  for (zmq::socket_t& feed : feeds) items.push_back({feed.handle(), 0, ZMQ_POLLIN, 0});
  auto next_pulse = Clock::now();
  bool busy = false;
  for (;;) {
    const auto now = Clock::now();
    if (now >= next_pulse) {
      beat();
      const std::string complaint = desk.take_complaint();
      if (!complaint.empty()) log::line(log::Level::warning, complaint);
      next_pulse = now + kPulseEvery;
    }
    const auto wait = std::chrono::duration_cast<std::chrono::milliseconds>(next_pulse - now);
    zmq::poll(items, busy ? std::chrono::milliseconds(0) : wait + std::chrono::milliseconds(1));
    if ((items[0].revents & ZMQ_POLLIN) != 0) break;
    publisher.serve_subscriptions();
    busy = take_from_peers(kTurn);
    busy = take_from_feeds(kTurn) || busy;
    accepted.store(engine.sequence(), std::memory_order_relaxed);
  }
  // What has arrived is still taken in, acknowledged and published.
  const auto end = Clock::now() + kDrain;
  while (Clock::now() < end) {
    const bool peers = take_from_peers(kTurn);
    if (!take_from_feeds(kTurn) && !peers) break;
  }
  accepted.store(engine.sequence(), std::memory_order_relaxed);
  beat();
}

void Daemon::Body::shut() {
  router.reset();
  feeds.clear();
  publisher.close();
}

Daemon::Daemon() = default;
Daemon::~Daemon() { stop(); }

Result<bool> Daemon::start(const Settings& settings) {
  auto body = std::make_unique<Body>(settings);
  std::atomic<int> opened{0};
  std::optional<Fault> fault;
  Body* const b = body.get();
  b->thread = std::thread([b, &opened, &fault] {
    fault = b->open();
    const bool ok = !fault;
    opened.store(1, std::memory_order_release);
    opened.notify_one();
    if (ok) b->loop();
    b->shut();
  });
  opened.wait(0, std::memory_order_acquire);
  if (fault) {
    b->thread.join();
    return *fault;
  }
  body_ = std::move(body);
  return true;
}

void Daemon::stop() {
  if (!body_) return;
  const std::uint64_t one = 1;
  if (write(body_->stop_event, &one, sizeof one) != sizeof one) {
    log::line(log::Level::error, "cannot signal the loop to stop");
  }
  body_->thread.join();
  body_.reset();
}

std::string Daemon::intake_address() const { return body_ ? body_->intake_address : std::string(); }
std::string Daemon::publish_address() const {
  return body_ ? body_->publish_address : std::string();
}
std::uint64_t Daemon::accepted() const {
  return body_ ? body_->accepted.load(std::memory_order_relaxed) : 0;
}

}  // namespace tailweir

#include "service/settings/values.h"

#include <algorithm>
#include <charconv>
#include <cmath>

#include "service/settings/names.h"

namespace tailweir {
namespace {

constexpr double kMostSamples = 1e7;               // of a window or half-life: 80 MB a channel
constexpr double kLongestTime = 36'500 * 86'400.;  // a hundred years, in seconds

std::string kind_of(const YamlNode& node) {
  switch (node.kind) {
    case YamlNode::Kind::nothing:
      return "nothing";
    case YamlNode::Kind::list:
      return "a list";
    case YamlNode::Kind::map:
      return "a map";
    case YamlNode::Kind::scalar:
      break;
  }
  return node.is_quoted ? "the text " + quoted(node.text) : quoted(node.text);
}

// The whole text as a double: false when it is none or outside the range of one.
bool whole_number_text(std::string_view text, double& out) {
  if (text.size() > 1 && text[0] == '+' && text[1] != '-') text.remove_prefix(1);
  double value = 0;
  const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), value);
  if (error != std::errc() || end != text.data() + text.size() || !std::isfinite(value)) {
    return false;
  }
  out = value;
  return true;
}

// Seconds of "250ms", "90s", "15min", "6h", "2d"; false for anything else.
bool time_length(std::string_view text, double& seconds) {
  const struct {
    std::string_view unit;
    double seconds;
  } units[] = {{"ms", 1e-3}, {"s", 1}, {"m", 60}, {"min", 60}, {"h", 3600}, {"d", 86400}};
  const std::size_t digits_end = text.find_first_not_of("+-0123456789.");
  if (digits_end == text.npos) return false;
  double value = 0;
  for (const auto& [unit, in_seconds] : units) {
    if (text.substr(digits_end) != unit) continue;
    if (!whole_number_text(text.substr(0, digits_end), value)) return false;
    seconds = value * in_seconds;
    return true;
  }
  return false;
}

bool is_port(std::string_view text, bool bound) {
  if (bound && text == "*") return true;
  int port = 0;
  const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), port);
  return error == std::errc() && end == text.data() + text.size() && port >= 1 && port <= 65535;
}

bool is_host_and_port(std::string_view text, bool bound) {
  const std::size_t colon = text.rfind(':');
  if (colon == text.npos || !is_port(text.substr(colon + 1), bound)) return false;
  const std::string_view host = text.substr(0, colon);
  if (host == "*") return bound;
  if (host.size() > 2 && host.front() == '[' && host.back() == ']') {
    return host.find_first_not_of("0123456789abcdefABCDEF:.%", 1) == host.size() - 1;
  }
  return !host.empty() && host.size() <= 253 && std::all_of(host.begin(), host.end(), [](char c) {
    return (c >= 'a' && c <= 'z') || (c >= 'A' && c <= 'Z') || (c >= '0' && c <= '9') || c == '.' ||
           c == '-' || c == '_';
  });
}

}  // namespace

bool ValueReader::fail(const YamlNode& at, std::string what, std::string allowed) {
  if (!fault_) fault_ = Fault{place_of(at, file_), std::move(what), std::move(allowed)};
  return false;
}

bool ValueReader::wrong_kind(const YamlNode& node, const std::string& key,
                             const std::string& wanted) {
  return fail(node, key + " is " + kind_of(node), "write " + wanted);
}

bool ValueReader::map(const YamlNode& node, const std::string& what,
                      const std::vector<std::string>& known,
                      const std::vector<std::string>& required) {
  if (node.kind != YamlNode::Kind::map) {
    return wrong_kind(node, what, "a map with the keys " + one_of(known));
  }
  for (const YamlNode& key : node.keys) {
    if (std::find(known.begin(), known.end(), key.text) != known.end()) continue;
    const std::string meant = nearest(key.text, known);
    return fail(key, "unknown key " + quoted(key.text) + " in " + what,
                meant.empty() ? "known are " + one_of(known) : "did you mean " + meant + "?");
  }
  for (const std::string& key : required) {
    if (node.find(key) == nullptr) {
      return fail(node, what + " lacks the key " + key, "add " + key + ": ...");
    }
  }
  return true;
}

bool ValueReader::list(const YamlNode& node, const std::string& key) {
  if (node.kind != YamlNode::Kind::list) return wrong_kind(node, key, "a list");
  if (node.items.empty()) return fail(node, key + " is an empty list", "give at least one item");
  return true;
}

bool ValueReader::text(const YamlNode& node, const std::string& key, std::string& out) {
  if (node.kind != YamlNode::Kind::scalar || node.text.empty()) {
    return wrong_kind(node, key, "a text");
  }
  const bool printable = std::all_of(node.text.begin(), node.text.end(), [](char c) {
    return static_cast<unsigned char>(c) >= 0x20 && c != 0x7f;
  });
  if (!printable) return fail(node, key + " has unprintable characters", "write plain text");
  out = node.text;
  return true;
}

bool ValueReader::name(const YamlNode& node, const std::string& key, std::string& out) {
  if (node.kind != YamlNode::Kind::scalar) return wrong_kind(node, key, "a name");
  if (!is_name(node.text)) {
    return fail(node, key + ": " + quoted(node.text) + " is no name", kNameRule);
  }
  out = node.text;
  return true;
}

bool ValueReader::number(const YamlNode& node, const std::string& key, double& out) {
  if (node.kind != YamlNode::Kind::scalar) return wrong_kind(node, key, "a number");
  double value = 0;
  const bool is_number = whole_number_text(node.text, value);
  if (is_number && node.is_quoted) {
    return fail(node, key + " is a text in quotes", "write " + node.text + " without quotes");
  }
  if (!is_number) return wrong_kind(node, key, "a finite number");
  out = value;
  return true;
}

bool ValueReader::positive(const YamlNode& node, const std::string& key, double& out) {
  double value = 0;
  if (!number(node, key, value)) return false;
  if (!(value > 0)) return fail(node, key + " is " + node.text, "write a number above 0");
  out = value;
  return true;
}

bool ValueReader::word(const YamlNode& node, const std::string& key,
                       const std::vector<std::string>& words, std::size_t& out) {
  if (node.kind != YamlNode::Kind::scalar) return wrong_kind(node, key, one_of(words));
  const auto found = std::find(words.begin(), words.end(), node.text);
  if (found == words.end()) {
    const std::string meant = nearest(node.text, words);
    return fail(node, key + " is " + quoted(node.text),
                meant.empty() ? "write " + one_of(words) : "did you mean " + meant + "?");
  }
  out = static_cast<std::size_t>(found - words.begin());
  return true;
}

bool ValueReader::numbers(const YamlNode& node, const std::string& key, Index count,
                          const std::string& each, Eigen::VectorXd& out) {
  if (!list(node, key)) return false;
  if (static_cast<Index>(node.items.size()) != count) {
    return fail(node, key + " has " + std::to_string(node.items.size()) + " numbers",
                "one per " + each + ": " + std::to_string(count));
  }
  Eigen::VectorXd values(count);
  for (Index i = 0; i < count; ++i) {
    if (!number(node.items[static_cast<std::size_t>(i)], key, values(i))) return false;
  }
  out = values;
  return true;
}

bool ValueReader::samples_or_time(const YamlNode& node, const std::string& key, bool whole,
                                  double& length, bool& is_time) {
  const std::string wanted = std::string(whole ? "a whole number" : "a number") +
                             " of samples such as 500, or a time such as 250ms, 90s, 15min, 6h, 2d";
  if (node.kind != YamlNode::Kind::scalar) return wrong_kind(node, key, wanted);
  double value = 0;
  const bool time = time_length(node.text, value);
  if (!time) {
    if (!whole_number_text(node.text, value)) return wrong_kind(node, key, wanted);
    if (node.is_quoted) {
      return fail(node, key + " is a text in quotes", "write " + node.text + " without quotes");
    }
  }
  if (!(value > 0)) return fail(node, key + " is " + node.text, "write a length above 0");
  if (!time && whole && value != std::floor(value)) return wrong_kind(node, key, wanted);
  if (!(value <= (time ? kLongestTime : kMostSamples))) {
    return fail(node, key + " is " + node.text,
                time ? "at most 36500d" : "at most 10000000 samples");
  }
  length = value;
  is_time = time;
  return true;
}

bool ValueReader::address(const YamlNode& node, const std::string& key, bool bound,
                          std::string& out) {
  constexpr std::size_t kLongestPath = 107;  // sun_path of Linux without its end
  const std::string wanted = "tcp://HOST:PORT or ipc:///PATH";
  if (node.kind != YamlNode::Kind::scalar) return wrong_kind(node, key, wanted);
  const std::string_view given = node.text;
  if (given.substr(0, 6) == "tcp://") {
    if (!is_host_and_port(given.substr(6), bound)) {
      return fail(node, key + ": " + quoted(given) + " has no good host and port",
                  "write tcp://HOST:PORT with a port from 1 to 65535");
    }
  } else if (given.substr(0, 6) == "ipc://") {
    const std::string_view path = given.substr(6);
    if (path.empty() || path.size() > kLongestPath || path.find('\0') != path.npos) {
      return fail(node, key + ": " + quoted(given) + " has no good path",
                  "write ipc:///PATH with at most 107 characters");
    }
  } else {
    return fail(node, key + ": " + quoted(given) + " is no address", "write " + wanted);
  }
  out = node.text;
  return true;
}

bool ValueReader::host_and_port(const YamlNode& node, const std::string& key, std::string& out) {
  if (node.kind != YamlNode::Kind::scalar) return wrong_kind(node, key, "HOST:PORT");
  if (!is_host_and_port(node.text, false)) {
    return fail(node, key + ": " + quoted(node.text) + " is no address",
                "write HOST:PORT, such as 127.0.0.1:7780");
  }
  out = node.text;
  return true;
}

}  // namespace tailweir

// Reads single values of a settings tree, and keeps the first thing that was wrong.
//
// Every function returns whether the value was right and leaves its output alone when not; after
// the first Fault the rest is noise, so callers stop at the first false. Thread rule: plain values.
#pragma once

#include <optional>
#include <string>
#include <vector>

#include "core/settings.h"
#include "service/settings/document.h"

namespace tailweir {

class ValueReader {
 public:
  explicit ValueReader(std::string file) : file_(std::move(file)) {}

  // Keeps a Fault at a node (the first one stands) and returns false.
  bool fail(const YamlNode& at, std::string what, std::string allowed);
  const std::optional<Fault>& fault() const { return fault_; }
  const std::string& file() const { return file_; }

  // A map whose keys are all among `known` and among which all of `required` are. `what` names the
  // thing in messages: "a channel".
  bool map(const YamlNode& node, const std::string& what, const std::vector<std::string>& known,
           const std::vector<std::string>& required = {});
  // A list with at least one item.
  bool list(const YamlNode& node, const std::string& key);
  bool text(const YamlNode& node, const std::string& key, std::string& out);
  bool name(const YamlNode& node, const std::string& key, std::string& out);
  // A finite number that is no quoted text.
  bool number(const YamlNode& node, const std::string& key, double& out);
  bool positive(const YamlNode& node, const std::string& key, double& out);
  // One of the words; out is its place in the list.
  bool word(const YamlNode& node, const std::string& key, const std::vector<std::string>& words,
            std::size_t& out);
  // A list of finite numbers, `count` of them; `each` says what one belongs to ("channel").
  bool numbers(const YamlNode& node, const std::string& key, Index count, const std::string& each,
               Eigen::VectorXd& out);
  // A positive number of samples (whole when `whole`) or a time: 250ms, 90s, 15min, 6h, 2d.
  bool samples_or_time(const YamlNode& node, const std::string& key, bool whole, double& length,
                       bool& is_time);
  // tcp://HOST:PORT or ipc://PATH; a bound address may have the host or port *.
  bool address(const YamlNode& node, const std::string& key, bool bound, std::string& out);
  // HOST:PORT.
  bool host_and_port(const YamlNode& node, const std::string& key, std::string& out);

 private:
  bool wrong_kind(const YamlNode& node, const std::string& key, const std::string& wanted);

  std::string file_;
  std::optional<Fault> fault_;
};

}  // namespace tailweir

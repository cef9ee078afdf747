// Strict reading of a YAML tree: every access checks kind, type and range, and the first thing
// wrong is kept with its place. Private to service/settings, the only home of yaml-cpp. Thread
// rule: one owner.
#pragma once

#include <yaml-cpp/yaml.h>

#include <functional>
#include <optional>
#include <string>
#include <vector>

#include "core/result.h"

namespace tailweir::yaml {

// Parses text. Fault for a syntax error, an alias or anchor, several documents, or over 1 MB.
Result<YAML::Node> parse(const std::string& text, const std::string& file);

// The name in `known` closest to `word`, empty when none is near.
std::string nearest(const std::string& word, const std::vector<std::string>& known);

class Reader {
 public:
  explicit Reader(std::string file) : file_(std::move(file)) {}

  bool ok() const { return !fault_; }
  const std::optional<Fault>& fault() const { return fault_; }

  // Keeps the first fault only.
  void fail(const YAML::Node& at, const std::string& what, const std::string& allowed);
  void fail(const YAML::Mark& at, const std::string& what, const std::string& allowed);

  // Calls `each` for every entry of a map after checking that its key is known and new. what names
  // the map in messages.
  void map(const YAML::Node& node, const std::string& what, const std::vector<std::string>& known,
           const std::function<void(const std::string& key, const YAML::Node& value)>& each);
  // Calls `each` for every element of a list.
  void list(const YAML::Node& node, const std::string& what,
            const std::function<void(const YAML::Node& element)>& each);

  std::string text(const YAML::Node& node, const std::string& what, const std::string& allowed);
  // A plain (unquoted) finite number.
  double number(const YAML::Node& node, const std::string& what, const std::string& allowed);
  bool is_number(const YAML::Node& node) const;
  // Seconds from "250ms", "90s", "15m", "6h", "2d"; nothing when it is not written like a time.
  static std::optional<double> seconds(const std::string& text);

 private:
  std::string file_;
  std::optional<Fault> fault_;
};

}  // namespace tailweir::yaml

// A YAML document as a plain tree that remembers where everything stands.
//
// Only the small part of YAML that settings need: maps with plain keys, lists, scalars. Refused
// with their place: anchors and aliases, tags, duplicate or composite keys, several documents,
// nesting deeper than 12, and whatever the parser itself refuses. yaml-cpp is included by the .cpp
// only. Thread rule: plain values.
#pragma once

#include <string>
#include <string_view>
#include <vector>

#include "core/result.h"

namespace tailweir {

struct YamlNode {
  enum class Kind { nothing, scalar, list, map };
  Kind kind = Kind::nothing;
  int line = 1, column = 1;     // of the first character, counted from 1
  std::string text;             // of a scalar
  bool is_quoted = false;       // "4" or '4': a text, never a number
  std::vector<YamlNode> keys;   // of a map: scalars, distinct
  std::vector<YamlNode> items;  // of a map: the values, beside keys; of a list: its items

  // The value of a key of a map, or nullptr. Any kind of node.
  const YamlNode* find(std::string_view key) const;
};

// "name:line:column" of a node.
std::string place_of(const YamlNode& node, const std::string& name);

// Parses a whole text; name stands for the file in messages.
Result<YamlNode> parse_document(const std::string& text, const std::string& name);

}  // namespace tailweir

#include "service/settings/document.h"

#include <yaml-cpp/eventhandler.h>
#include <yaml-cpp/exceptions.h>
#include <yaml-cpp/parser.h>

#include <optional>
#include <sstream>

#include "service/settings/names.h"

namespace tailweir {
namespace {

constexpr std::size_t kDeepest = 12;

// Builds the tree from the parser's events. The first thing that settings may not contain ends the
// parse by an exception of this file.
class TreeBuilder : public YAML::EventHandler {
 public:
  struct Refused {
    Fault fault;
  };

  explicit TreeBuilder(std::string name) : name_(std::move(name)) {}
  YamlNode root;

  void OnDocumentStart(const YAML::Mark&) override {}
  void OnDocumentEnd() override {}

  void OnNull(const YAML::Mark& mark, YAML::anchor_t anchor) override {
    add(node(YamlNode::Kind::nothing, mark, "?", anchor));
  }

  void OnAlias(const YAML::Mark& mark, YAML::anchor_t) override {
    refuse(mark, "an alias (*) is not accepted", "write the value out");
  }

  void OnScalar(const YAML::Mark& mark, const std::string& tag, YAML::anchor_t anchor,
                const std::string& value) override {
    YamlNode scalar = node(YamlNode::Kind::scalar, mark, tag, anchor);
    scalar.text = value;
    scalar.is_quoted = tag == "!";
    add(std::move(scalar));
  }

  void OnSequenceStart(const YAML::Mark& mark, const std::string& tag, YAML::anchor_t anchor,
                       YAML::EmitterStyle::value) override {
    open(node(YamlNode::Kind::list, mark, tag, anchor));
  }
  void OnSequenceEnd() override { close(); }

  void OnMapStart(const YAML::Mark& mark, const std::string& tag, YAML::anchor_t anchor,
                  YAML::EmitterStyle::value) override {
    open(node(YamlNode::Kind::map, mark, tag, anchor));
  }
  void OnMapEnd() override { close(); }

 private:
  [[noreturn]] void refuse(const YAML::Mark& mark, std::string what, std::string allowed) {
    throw Refused{
        {name_ + ":" + std::to_string(mark.line + 1) + ":" + std::to_string(mark.column + 1),
         std::move(what), std::move(allowed)}};
  }
  [[noreturn]] void refuse(const YamlNode& at, std::string what, std::string allowed) {
    throw Refused{{place_of(at, name_), std::move(what), std::move(allowed)}};
  }

  YamlNode node(YamlNode::Kind kind, const YAML::Mark& mark, const std::string& tag,
                YAML::anchor_t anchor) {
    if (anchor != 0) refuse(mark, "an anchor (&) is not accepted", "write the value out");
    if (!tag.empty() && tag != "?" && tag != "!") {
      refuse(mark, "a tag (!) is not accepted", "write the value alone");
    }
    YamlNode made;
    made.kind = kind;
    made.line = mark.line + 1;
    made.column = mark.column + 1;
    return made;
  }

  // A node that may get children: kept on the stack until it closes.
  void open(YamlNode made) {
    if (stack_.size() == kDeepest) refuse(made, "is nested too deeply", "see config/README.md");
    if (expects_key()) refuse(made, "a map or list cannot be a key", "keys are words");
    stack_.push_back(std::move(made));
  }

  void close() {
    YamlNode done = std::move(stack_.back());
    stack_.pop_back();
    add(std::move(done));
  }

  bool expects_key() const {
    return !stack_.empty() && stack_.back().kind == YamlNode::Kind::map &&
           stack_.back().keys.size() == stack_.back().items.size();
  }

  void add(YamlNode made) {
    if (stack_.empty()) {
      root = std::move(made);
      return;
    }
    YamlNode& parent = stack_.back();
    if (!expects_key()) {
      // An absent value has no place of its own: show its key.
      if (made.kind == YamlNode::Kind::nothing && parent.kind == YamlNode::Kind::map) {
        made.line = parent.keys.back().line;
        made.column = parent.keys.back().column;
      }
      parent.items.push_back(std::move(made));
      return;
    }
    if (made.kind != YamlNode::Kind::scalar) refuse(made, "has no key", "write KEY: VALUE");
    for (const YamlNode& key : parent.keys) {
      if (key.text == made.text) {
        refuse(
            made,
            "key " + quoted(made.text) + " stands twice, first in line " + std::to_string(key.line),
            "keep one of them");
      }
    }
    parent.keys.push_back(std::move(made));
  }

  std::string name_;
  std::vector<YamlNode> stack_;
};

}  // namespace

const YamlNode* YamlNode::find(std::string_view key) const {
  for (std::size_t i = 0; i < keys.size(); ++i) {
    if (keys[i].text == key) return &items[i];
  }
  return nullptr;
}

std::string place_of(const YamlNode& node, const std::string& name) {
  return name + ":" + std::to_string(node.line) + ":" + std::to_string(node.column);
}

Result<YamlNode> parse_document(const std::string& text, const std::string& name) {
  TreeBuilder builder(name);
  const auto at = [&name](const YAML::Mark& mark) {
    const bool known = !mark.is_null();
    return name + ":" + std::to_string(known ? mark.line + 1 : 1) + ":" +
           std::to_string(known ? mark.column + 1 : 1);
  };
  try {
    std::istringstream stream(text);
    YAML::Parser parser(stream);
    if (!parser.HandleNextDocument(builder)) {
      return Fault{name + ":1:1", "is empty", "settings need channels and panels"};
    }
    YamlNode root = std::move(builder.root);
    TreeBuilder second(name);
    if (parser.HandleNextDocument(second)) {
      return Fault{place_of(second.root, name), "a second document starts here",
                   "one document a file"};
    }
    return root;
  } catch (const TreeBuilder::Refused& refused) {
    return refused.fault;
  } catch (const YAML::Exception& error) {
    return Fault{at(error.mark), "is not valid YAML: " + error.msg,
                 "check indentation, colons and quotes here and in the line before"};
  }
}

}  // namespace tailweir

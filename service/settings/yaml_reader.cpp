#include "service/settings/yaml_reader.h"

#include <yaml-cpp/eventhandler.h>

#include <algorithm>
#include <charconv>
#include <cmath>
#include <set>
#include <sstream>

namespace tailweir::yaml {
namespace {

std::string place(const std::string& file, const YAML::Mark& mark) {
  if (mark.is_null()) return file;
  return file + ":" + std::to_string(mark.line + 1) + ":" + std::to_string(mark.column + 1);
}

// Walks the events of a document and remembers the first alias or anchor: settings that refer to
// themselves cannot be checked key by key.
class AliasFinder : public YAML::EventHandler {
 public:
  std::optional<YAML::Mark> found;

  void OnDocumentStart(const YAML::Mark&) override {}
  void OnDocumentEnd() override {}
  void OnNull(const YAML::Mark& mark, YAML::anchor_t anchor) override { note(mark, anchor); }
  void OnAlias(const YAML::Mark& mark, YAML::anchor_t) override { note(mark, 1); }
  void OnScalar(const YAML::Mark& mark, const std::string&, YAML::anchor_t anchor,
                const std::string&) override {
    note(mark, anchor);
  }
  void OnSequenceStart(const YAML::Mark& mark, const std::string&, YAML::anchor_t anchor,
                       YAML::EmitterStyle::value) override {
    note(mark, anchor);
  }
  void OnSequenceEnd() override {}
  void OnMapStart(const YAML::Mark& mark, const std::string&, YAML::anchor_t anchor,
                  YAML::EmitterStyle::value) override {
    note(mark, anchor);
  }
  void OnMapEnd() override {}

 private:
  void note(const YAML::Mark& mark, YAML::anchor_t anchor) {
    if (anchor != 0 && !found) found = mark;
  }
};

constexpr std::size_t kLargestFile = 1 << 20;

int edit_distance(const std::string& a, const std::string& b) {
  std::vector<int> row(b.size() + 1);
  for (std::size_t j = 0; j <= b.size(); ++j) row[j] = static_cast<int>(j);
  for (std::size_t i = 1; i <= a.size(); ++i) {
    int corner = row[0];
    row[0] = static_cast<int>(i);
    for (std::size_t j = 1; j <= b.size(); ++j) {
      const int next = std::min({row[j] + 1, row[j - 1] + 1, corner + (a[i - 1] != b[j - 1])});
      corner = row[j];
      row[j] = next;
    }
  }
  return row[b.size()];
}

std::string joined(const std::vector<std::string>& words) {
  std::string text;
  for (const std::string& word : words) text += (text.empty() ? "" : ", ") + word;
  return text;
}

}  // namespace

Result<YAML::Node> parse(const std::string& text, const std::string& file) {
  if (text.size() > kLargestFile) {
    return Fault{file, "the file has " + std::to_string(text.size()) + " bytes",
                 "settings of at most 1 MB"};
  }
  try {
    std::istringstream in(text);
    YAML::Parser parser(in);
    AliasFinder finder;
    while (parser.HandleNextDocument(finder)) {
    }
    if (finder.found) {
      return Fault{place(file, *finder.found), "anchors and aliases are not accepted",
                   "write the value out"};
    }
    std::vector<YAML::Node> documents = YAML::LoadAll(text);
    if (documents.size() > 1) {
      return Fault{place(file, documents[1].Mark()), "a second document starts here",
                   "one document a file"};
    }
    return documents.empty() ? YAML::Node() : documents[0];
  } catch (const YAML::Exception& error) {
    return Fault{place(file, error.mark), "this is not YAML: " + error.msg,
                 "see config/README.md for the format"};
  }
}

std::string nearest(const std::string& word, const std::vector<std::string>& known) {
  std::string best;
  int least = 1 + static_cast<int>(word.size()) / 3;
  for (const std::string& name : known) {
    const int distance = edit_distance(word, name);
    if (distance <= least) {
      least = distance - 1;
      best = name;
    }
  }
  return best;
}

void Reader::fail(const YAML::Mark& at, const std::string& what, const std::string& allowed) {
  if (!fault_) fault_ = Fault{place(file_, at), what, allowed};
}

void Reader::fail(const YAML::Node& at, const std::string& what, const std::string& allowed) {
  fail(at.Mark(), what, allowed);
}

void Reader::map(const YAML::Node& node, const std::string& what,
                 const std::vector<std::string>& known,
                 const std::function<void(const std::string&, const YAML::Node&)>& each) {
  if (!ok()) return;
  if (!node.IsMap()) {
    return fail(node, what + " is not a map", "keys such as " + joined(known));
  }
  std::set<std::string> seen;
  for (const auto& entry : node) {
    if (!ok()) return;
    if (!entry.first.IsScalar()) return fail(entry.first, "a key is not a word", joined(known));
    const std::string key = entry.first.Scalar();
    if (std::find(known.begin(), known.end(), key) == known.end()) {
      const std::string near = nearest(key, known);
      return fail(entry.first, "unknown key '" + key + "' in " + what,
                  near.empty() ? "one of " + joined(known) : "did you mean '" + near + "'?");
    }
    if (!seen.insert(key).second) {
      return fail(entry.first, "key '" + key + "' is given twice in " + what, "each key once");
    }
    each(key, entry.second);
  }
}

void Reader::list(const YAML::Node& node, const std::string& what,
                  const std::function<void(const YAML::Node&)>& each) {
  if (!ok()) return;
  if (!node.IsSequence()) return fail(node, what + " is not a list", "a list, [a, b] or - lines");
  for (const YAML::Node& element : node) {
    if (!ok()) return;
    each(element);
  }
}

std::string Reader::text(const YAML::Node& node, const std::string& what,
                         const std::string& allowed) {
  if (!ok()) return {};
  if (!node.IsScalar() || node.Scalar().empty()) {
    fail(node, what + " is not a text", allowed);
    return {};
  }
  return node.Scalar();
}

bool Reader::is_number(const YAML::Node& node) const {
  if (!node.IsScalar() || node.Tag() == "!") return false;
  const std::string& text = node.Scalar();
  double value = 0;
  const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), value);
  return error == std::errc() && end == text.data() + text.size() && std::isfinite(value);
}

double Reader::number(const YAML::Node& node, const std::string& what, const std::string& allowed) {
  if (!ok()) return 0;
  if (!is_number(node)) {
    const std::string shown = node.IsScalar() ? "'" + node.Scalar() + "' " : "";
    fail(node, what + " " + shown + "is not a number", allowed);
    return 0;
  }
  double value = 0;
  const std::string& text = node.Scalar();
  std::from_chars(text.data(), text.data() + text.size(), value);
  return value;
}

std::optional<double> Reader::seconds(const std::string& text) {
  double value = 0;
  const char* const end = text.data() + text.size();
  const auto [rest, error] = std::from_chars(text.data(), end, value);
  if (error != std::errc() || !std::isfinite(value)) return {};
  const std::string unit(rest, end);
  if (unit == "ms") return value / 1000;
  if (unit == "s") return value;
  if (unit == "m") return value * 60;
  if (unit == "h") return value * 3600;
  if (unit == "d") return value * 86400;
  return {};
}

}  // namespace tailweir::yaml

// What a function returns when outside input may be wrong: either a value or a Fault.
//
// A Fault says what is wrong, where, which value was met and what would be right, and prints as one
// line. Bugs in this program assert instead; how an iteration ended is a stop reason in its report.
// Thread rule: plain values, no sharing.
#pragma once

#include <cassert>
#include <string>
#include <utility>
#include <variant>

namespace tailweir {

struct Fault {
  std::string where;    // file:line:column, key, channel or sender; may be empty
  std::string what;     // what is wrong, in plain words
  std::string allowed;  // what would be right; may be empty

  // "where: what; allowed", leaving out the empty parts. No trailing newline.
  std::string line() const {
    std::string text = where.empty() ? what : where + ": " + what;
    return allowed.empty() ? text : text + "; " + allowed;
  }
};

template <typename Value>
class [[nodiscard]] Result {
 public:
  Result(Value value) : content_(std::move(value)) {}  // NOLINT: implicit on purpose
  Result(Fault fault) : content_(std::move(fault)) {}  // NOLINT: implicit on purpose

  bool ok() const { return std::holds_alternative<Value>(content_); }
  explicit operator bool() const { return ok(); }

  // Precondition: ok().
  Value& value() {
    assert(ok());
    return *std::get_if<Value>(&content_);
  }
  const Value& value() const {
    assert(ok());
    return *std::get_if<Value>(&content_);
  }
  // Precondition: !ok().
  const Fault& fault() const {
    assert(!ok());
    return *std::get_if<Fault>(&content_);
  }

 private:
  std::variant<Value, Fault> content_;
};

}  // namespace tailweir

// Names of channels, panels and horizons, and the nearest known word to a mistyped one.
//
// A name is 1 to 31 of a-z 0-9 _ . - so that it fits the wire's fixed fields, a file name and a
// metric label as it is. Thread rule: pure functions.
#pragma once

#include <string>
#include <string_view>
#include <vector>

namespace tailweir {

constexpr std::size_t kNameLength = 31;
constexpr const char* kNameRule = "use 1 to 31 of a-z 0-9 _ . -";

bool is_name(std::string_view text);

// The text as one would quote it in a message: in quotes, unprintable bytes as \xNN, cut at 40.
std::string quoted(std::string_view text);

// The known word with the smallest edit distance (Damerau: insert, delete, replace, swap of
// neighbours), when that is at most a third of the longer word plus one; empty otherwise.
std::string nearest(std::string_view text, const std::vector<std::string>& known);

// "a, b or c".
std::string one_of(const std::vector<std::string>& words);

}  // namespace tailweir

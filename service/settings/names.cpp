#include "service/settings/names.h"

#include <algorithm>

namespace tailweir {
namespace {

std::size_t edit_distance(std::string_view a, std::string_view b) {
  std::vector<std::vector<std::size_t>> d(a.size() + 1, std::vector<std::size_t>(b.size() + 1));
  for (std::size_t i = 0; i <= a.size(); ++i) d[i][0] = i;
  for (std::size_t j = 0; j <= b.size(); ++j) d[0][j] = j;
  for (std::size_t i = 1; i <= a.size(); ++i) {
    for (std::size_t j = 1; j <= b.size(); ++j) {
      const std::size_t replace = d[i - 1][j - 1] + (a[i - 1] == b[j - 1] ? 0U : 1U);
      d[i][j] = std::min({d[i - 1][j] + 1, d[i][j - 1] + 1, replace});
      if (i > 1 && j > 1 && a[i - 1] == b[j - 2] && a[i - 2] == b[j - 1]) {
        d[i][j] = std::min(d[i][j], d[i - 2][j - 2] + 1);
      }
    }
  }
  return d[a.size()][b.size()];
}

}  // namespace

bool is_name(std::string_view text) {
  if (text.empty() || text.size() > kNameLength) return false;
  return std::all_of(text.begin(), text.end(), [](char c) {
    return (c >= 'a' && c <= 'z') || (c >= '0' && c <= '9') || c == '_' || c == '.' || c == '-';
  });
}

std::string quoted(std::string_view text) {
  constexpr std::size_t kLongest = 40;
  constexpr const char* kHex = "0123456789abcdef";
  std::string out = "\"";
  for (const char c : text.substr(0, kLongest)) {
    const auto byte = static_cast<unsigned char>(c);
    if (byte < 0x20 || byte >= 0x7f) {
      out += "\\x";
      out += kHex[byte >> 4];
      out += kHex[byte & 15];
    } else {
      out += c;
    }
  }
  return out + (text.size() > kLongest ? "...\"" : "\"");
}

std::string nearest(std::string_view text, const std::vector<std::string>& known) {
  constexpr std::size_t kLongest = 64;  // a longer word is no slip of the finger
  std::string best;
  if (text.size() > kLongest) return best;
  std::size_t smallest = kLongest;
  for (const std::string& word : known) {
    const std::size_t distance = edit_distance(text, word);
    const std::size_t limit = std::max(text.size(), word.size()) / 3 + 1;
    if (distance <= limit && distance < smallest) {
      smallest = distance;
      best = word;
    }
  }
  return best;
}

std::string one_of(const std::vector<std::string>& words) {
  std::string out;
  for (std::size_t i = 0; i < words.size(); ++i) {
    if (i > 0) out += i + 1 == words.size() ? " or " : ", ";
    out += words[i];
  }
  return out;
}

}  // namespace tailweir

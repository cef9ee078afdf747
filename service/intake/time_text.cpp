#include "service/intake/time_text.h"

#include <charconv>
#include <chrono>

namespace tailweir {
namespace {

constexpr std::int64_t kSecond = 1'000'000'000;
constexpr std::int64_t kDay = 86'400 * kSecond;
constexpr const char* kAllowed =
    "write 2026-03-01T09:30:00Z, 2026-03-01, or whole nanoseconds since 1970";

Fault bad_time(std::string what) { return {"", std::move(what), kAllowed}; }

// Reads exactly `count` digits at text[at]; -1 when they are not all there.
int digits(std::string_view text, std::size_t at, std::size_t count) {
  if (at + count > text.size()) return -1;
  int value = 0;
  for (std::size_t i = at; i < at + count; ++i) {
    if (text[i] < '0' || text[i] > '9') return -1;
    value = 10 * value + (text[i] - '0');
  }
  return value;
}

bool is_integer(std::string_view text) {
  const std::size_t start = !text.empty() && text[0] == '-' ? 1 : 0;
  return text.size() > start && text.find_first_not_of("0123456789", start) == text.npos;
}

Result<std::int64_t> parse_date(std::string_view text) {
  const int year = digits(text, 0, 4), month = digits(text, 5, 2), day = digits(text, 8, 2);
  if (year < 0 || month < 0 || day < 0 || text[4] != '-' || text[7] != '-') {
    return bad_time("is not a time");
  }
  const std::chrono::year_month_day date{std::chrono::year(year),
                                         std::chrono::month(static_cast<unsigned>(month)),
                                         std::chrono::day(static_cast<unsigned>(day))};
  if (!date.ok()) return bad_time("is a date that does not exist");
  if (year < 1678 || year > 2261) return bad_time("lies outside the years 1678 to 2261");
  return std::chrono::sys_days(date).time_since_epoch().count() * kDay;
}

// The part behind the seconds: fraction, then zone. Returns nanoseconds to add.
Result<std::int64_t> parse_fraction_and_zone(std::string_view rest) {
  std::int64_t nanoseconds = 0;
  if (!rest.empty() && rest[0] == '.') {
    std::size_t used = 1;
    std::int64_t unit = kSecond / 10;
    for (; used < rest.size() && rest[used] >= '0' && rest[used] <= '9'; ++used, unit /= 10) {
      if (unit == 0 && rest[used] != '0') return bad_time("is finer than a nanosecond");
      nanoseconds += unit * (rest[used] - '0');
    }
    if (used == 1) return bad_time("has no digits behind the point");
    rest.remove_prefix(used);
  }
  if (rest == "Z" || rest == "z") return nanoseconds;
  if (rest.empty()) return bad_time("has no time zone: end it with Z or an offset such as +02:00");
  const int hours = digits(rest, 1, 2), minutes = digits(rest, 4, 2);
  if (rest.size() != 6 || (rest[0] != '+' && rest[0] != '-') || rest[3] != ':' || hours < 0 ||
      hours > 23 || minutes < 0 || minutes > 59) {
    return bad_time("has a time zone that is neither Z nor an offset such as +02:00");
  }
  const std::int64_t offset = (hours * 60 + minutes) * 60 * kSecond;
  return rest[0] == '+' ? nanoseconds - offset : nanoseconds + offset;
}

}  // namespace

Result<std::int64_t> read_time(std::string_view text) {
  if (is_integer(text)) {
    std::int64_t value = 0;
    if (std::from_chars(text.data(), text.data() + text.size(), value).ec != std::errc()) {
      return bad_time("is more nanoseconds than 64 bits hold");
    }
    return value;
  }
  if (text.size() < 10) return bad_time("is not a time");
  Result<std::int64_t> date = parse_date(text.substr(0, 10));
  if (!date || text.size() == 10) return date;
  const int hour = digits(text, 11, 2), minute = digits(text, 14, 2), second = digits(text, 17, 2);
  if ((text[10] != 'T' && text[10] != 't' && text[10] != ' ') || hour < 0 || minute < 0 ||
      second < 0 || text[13] != ':' || text[16] != ':') {
    return bad_time("is not a time");
  }
  if (hour > 23 || minute > 59 || second > 60 || (second == 60 && minute != 59)) {
    return bad_time("is a time of day that does not exist");
  }
  Result<std::int64_t> rest = parse_fraction_and_zone(text.substr(19));
  if (!rest) return rest;
  return date.value() + ((hour * 60 + minute) * 60 + second) * kSecond + rest.value();
}

std::optional<std::int64_t> parse_time(std::string_view text) {
  const Result<std::int64_t> time = read_time(text);
  return time ? std::optional<std::int64_t>(time.value()) : std::nullopt;
}

void append_time(std::string& text, std::int64_t time_ns) {
  constexpr std::size_t kLength = 30;
  text.resize(text.size() + kLength);
  char* out = text.data() + text.size() - kLength;
  std::int64_t day = time_ns / kDay, rest = time_ns % kDay;
  if (rest < 0) {
    rest += kDay;
    --day;
  }
  const std::chrono::year_month_day date{
      std::chrono::sys_days(std::chrono::days(static_cast<int>(day)))};
  const auto put = [&out](std::int64_t value, int count) {
    for (int i = count - 1; i >= 0; --i, value /= 10) out[i] = static_cast<char>('0' + value % 10);
    out += count;
  };
  put(static_cast<int>(date.year()), 4);
  *out++ = '-';
  put(static_cast<unsigned>(date.month()), 2);
  *out++ = '-';
  put(static_cast<unsigned>(date.day()), 2);
  *out++ = 'T';
  put(rest / (3600 * kSecond), 2);
  *out++ = ':';
  put(rest / (60 * kSecond) % 60, 2);
  *out++ = ':';
  put(rest / kSecond % 60, 2);
  *out++ = '.';
  put(rest % kSecond, 9);
  *out++ = 'Z';
}

std::string format_time(std::int64_t time_ns) {
  std::string text;
  append_time(text, time_ns);
  return text;
}

}  // namespace tailweir

#include "service/intake/time_text.h"

#include <array>
#include <charconv>

namespace tailweir {
namespace {

constexpr std::int64_t kSecond = 1000000000;

// Days from 1970-01-01 in the proleptic Gregorian calendar (years counted from March).
std::int64_t days_from_date(std::int64_t year, int month, int day) {
  year -= month <= 2;
  const std::int64_t era = (year >= 0 ? year : year - 399) / 400;
  const std::int64_t of_era = year - era * 400;
  const std::int64_t of_year = (153 * (month + (month > 2 ? -3 : 9)) + 2) / 5 + day - 1;
  const std::int64_t days = of_era * 365 + of_era / 4 - of_era / 100 + of_year;
  return era * 146097 + days - 719468;
}

void date_from_days(std::int64_t days, std::int64_t& year, int& month, int& day) {
  days += 719468;
  const std::int64_t era = (days >= 0 ? days : days - 146096) / 146097;
  const std::int64_t of_era = days - era * 146097;
  const std::int64_t years = (of_era - of_era / 1460 + of_era / 36524 - of_era / 146096) / 365;
  const std::int64_t of_year = of_era - (365 * years + years / 4 - years / 100);
  const std::int64_t shifted = (5 * of_year + 2) / 153;
  day = static_cast<int>(of_year - (153 * shifted + 2) / 5 + 1);
  month = static_cast<int>(shifted < 10 ? shifted + 3 : shifted - 9);
  year = years + era * 400 + (month <= 2);
}

// Takes exactly `width` digits from the front.
bool take_digits(std::string_view& text, int width, int& value) {
  if (text.size() < static_cast<std::size_t>(width)) return false;
  value = 0;
  for (int k = 0; k < width; ++k) {
    const char c = text[static_cast<std::size_t>(k)];
    if (c < '0' || c > '9') return false;
    value = value * 10 + (c - '0');
  }
  text.remove_prefix(static_cast<std::size_t>(width));
  return true;
}

bool take(std::string_view& text, char c) {
  if (text.empty() || text.front() != c) return false;
  text.remove_prefix(1);
  return true;
}

int days_in_month(int year, int month) {
  constexpr std::array<int, 12> kDays = {31, 28, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31};
  const bool leap = (year % 4 == 0 && year % 100 != 0) || year % 400 == 0;
  return month == 2 && leap ? 29 : kDays[static_cast<std::size_t>(month - 1)];
}

std::optional<std::int64_t> parse_clock(std::string_view text, std::int64_t days) {
  int hour = 0, minute = 0, second = 0;
  if (!take_digits(text, 2, hour) || !take(text, ':') || !take_digits(text, 2, minute)) return {};
  if (take(text, ':') && !take_digits(text, 2, second)) return {};
  if (hour > 23 || minute > 59 || second > 60) return {};
  std::int64_t fraction = 0;
  if (take(text, '.')) {
    std::int64_t unit = kSecond;
    if (text.empty() || text.front() < '0' || text.front() > '9') return {};
    while (!text.empty() && text.front() >= '0' && text.front() <= '9') {
      unit /= 10;
      fraction += unit * (text.front() - '0');
      text.remove_prefix(1);
    }
  }
  std::int64_t offset = 0;
  if (!text.empty() && (text == "Z" || text == "z")) {
    text.remove_prefix(1);
  } else {
    const bool plus = take(text, '+');
    if (!plus && !take(text, '-')) return {};
    int hours = 0, minutes = 0;
    if (!take_digits(text, 2, hours) || !take(text, ':') || !take_digits(text, 2, minutes))
      return {};
    if (hours > 23 || minutes > 59) return {};
    offset = (plus ? 1 : -1) * (hours * 3600 + minutes * 60);
  }
  if (!text.empty()) return {};
  return ((days * 86400 + hour * 3600 + minute * 60 + second) - offset) * kSecond + fraction;
}

}  // namespace

std::optional<std::int64_t> parse_time(std::string_view text) {
  std::int64_t integer = 0;
  const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), integer);
  if (error == std::errc() && end == text.data() + text.size()) return integer;
  int year = 0, month = 0, day = 0;
  if (!take_digits(text, 4, year) || !take(text, '-') || !take_digits(text, 2, month) ||
      !take(text, '-') || !take_digits(text, 2, day)) {
    return {};
  }
  if (year < 1678 || year > 2261 || month < 1 || month > 12 || day < 1 ||
      day > days_in_month(year, month)) {
    return {};
  }
  const std::int64_t days = days_from_date(year, month, day);
  if (text.empty()) return days * 86400 * kSecond;
  if (!take(text, 'T') && !take(text, 't') && !take(text, ' ')) return {};
  return parse_clock(text, days);
}

void append_time(std::string& text, std::int64_t time_ns) {
  std::int64_t seconds = time_ns / kSecond;
  std::int64_t fraction = time_ns % kSecond;
  if (fraction < 0) {
    fraction += kSecond;
    --seconds;
  }
  std::int64_t days = seconds / 86400;
  std::int64_t left = seconds % 86400;
  if (left < 0) {
    left += 86400;
    --days;
  }
  std::int64_t year = 0;
  int month = 0, day = 0;
  date_from_days(days, year, month, day);
  const auto digits = [&](std::int64_t value, int width) {
    std::int64_t unit = 1;
    for (int k = 1; k < width; ++k) unit *= 10;
    for (; unit > 0; unit /= 10) text += static_cast<char>('0' + value / unit % 10);
  };
  digits(year, 4);
  text += '-';
  digits(month, 2);
  text += '-';
  digits(day, 2);
  text += 'T';
  digits(left / 3600, 2);
  text += ':';
  digits(left / 60 % 60, 2);
  text += ':';
  digits(left % 60, 2);
  text += '.';
  digits(fraction, 9);
  text += 'Z';
}

std::string format_time(std::int64_t time_ns) {
  std::string text;
  append_time(text, time_ns);
  return text;
}

}  // namespace tailweir

// Times as people write them: RFC 3339 text to nanoseconds since 1970-01-01T00:00Z and back.
//
// Days are counted in the proleptic Gregorian calendar; leap seconds are folded into the second
// that follows, as POSIX time does. Range: 1678 to 2261, what 64-bit nanoseconds hold in whole
// years. Source: RFC 3339, section 5.6. Thread rule: pure functions, no locale, no time zone
// tables.
#pragma once

#include <cstdint>
#include <optional>
#include <string>
#include <string_view>

#include "core/result.h"

namespace tailweir {

// Reads "2026-03-01T09:30:00.25Z" (or a blank for the T, or an offset such as +02:00), a bare date
// (midnight UTC), or an integer count of nanoseconds. The Fault names what is wrong with the text;
// its `where` is empty.
Result<std::int64_t> read_time(std::string_view text);
// The same without the reason.
std::optional<std::int64_t> parse_time(std::string_view text);

// "2026-03-01T09:30:00.250000000Z": always UTC, always nine digits, so that lines sort as text.
// Any time_ns.
std::string format_time(std::int64_t time_ns);
void append_time(std::string& text, std::int64_t time_ns);

}  // namespace tailweir

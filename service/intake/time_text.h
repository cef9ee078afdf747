// Times as text: RFC 3339 or whole nanoseconds since 1970-01-01T00:00Z, both ways. Pure functions.
#pragma once

#include <cstdint>
#include <optional>
#include <string>
#include <string_view>

namespace tailweir {

// "2026-03-01T09:30:00.25+01:00", "2026-03-01T09:30:00Z", "2026-03-01 09:30:00Z", "2026-03-01"
// (midnight UTC) or an integer of nanoseconds. Nothing when it is none of these or out of range
// (1678 to 2262).
std::optional<std::int64_t> parse_time(std::string_view text);

// RFC 3339 in UTC with nanoseconds: "2026-03-01T08:30:00.250000000Z".
std::string format_time(std::int64_t time_ns);
void append_time(std::string& text, std::int64_t time_ns);

}  // namespace tailweir

// CRC-32C (Castagnoli), the checksum of every frame. Standard: RFC 3720, appendix B.4.
#pragma once

#include <cstddef>
#include <cstdint>

namespace tailweir::wire {

// Checksum of `size` bytes; chain with the previous result for data in pieces, 0 to start.
std::uint32_t crc32c(const void* data, std::size_t size, std::uint32_t previous = 0);

}  // namespace tailweir::wire

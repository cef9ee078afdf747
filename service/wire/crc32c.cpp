#include "service/wire/crc32c.h"

#include <isa-l/crc.h>

#include <algorithm>

namespace tailweir::wire {

std::uint32_t crc32c(const void* data, std::size_t size, std::uint32_t previous) {
  // The library works on the inverted register and takes an int length; it does not write.
  unsigned char* bytes = const_cast<unsigned char*>(static_cast<const unsigned char*>(data));
  std::uint32_t state = ~previous;
  while (size > 0) {
    const std::size_t piece = std::min<std::size_t>(size, 1 << 30);
    state = crc32_iscsi(bytes, static_cast<int>(piece), state);
    bytes += piece;
    size -= piece;
  }
  return ~state;
}

}  // namespace tailweir::wire

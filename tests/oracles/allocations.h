// Counts calls of malloc in the whole test program, for tests that claim a path allocates nothing.
//
// Works through a malloc of its own in front of glibc's; operator new and Eigen both go through it.
// Under AddressSanitizer the sanitizer owns malloc: the count stays 0 there and counting() is
// false. Thread rule: the count is atomic; compare two counts taken on a quiet program.
#pragma once

#include <cstddef>

namespace tailweir::oracles {

bool counting();
std::size_t allocations();

}  // namespace tailweir::oracles

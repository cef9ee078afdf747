#include "tests/oracles/allocations.h"

#include <atomic>

#if defined(__SANITIZE_ADDRESS__) || defined(__SANITIZE_THREAD__) || !defined(__GLIBC__)
#define TAILWEIR_COUNTS_MALLOC 0
#elif defined(__has_feature)
#if __has_feature(address_sanitizer) || __has_feature(thread_sanitizer)
#define TAILWEIR_COUNTS_MALLOC 0
#endif
#endif
#ifndef TAILWEIR_COUNTS_MALLOC
#define TAILWEIR_COUNTS_MALLOC 1
#endif

namespace {
std::atomic<std::size_t> count{0};
}  // namespace

#if TAILWEIR_COUNTS_MALLOC
extern "C" {
void* __libc_malloc(std::size_t size);                 // NOLINT(bugprone-reserved-identifier)
void* __libc_calloc(std::size_t n, std::size_t size);  // NOLINT(bugprone-reserved-identifier)

void* malloc(std::size_t size) {
  count.fetch_add(1, std::memory_order_relaxed);
  return __libc_malloc(size);
}

void* calloc(std::size_t n, std::size_t size) {
  count.fetch_add(1, std::memory_order_relaxed);
  return __libc_calloc(n, size);
}
}
#endif

namespace tailweir::oracles {

bool counting() { return TAILWEIR_COUNTS_MALLOC != 0; }
std::size_t allocations() { return count.load(std::memory_order_relaxed); }

}  // namespace tailweir::oracles

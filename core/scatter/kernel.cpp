#include "core/scatter/kernel.h"

namespace tailweir::kernel {
namespace {

bool has_v3() {
  static const bool has = __builtin_cpu_supports("avx2") && __builtin_cpu_supports("fma");
  return has;
}

}  // namespace

void run(const Pass& pass) { has_v3() ? v3::run(pass) : baseline::run(pass); }

const char* version_name() { return has_v3() ? "x86-64-v3" : "x86-64"; }

}  // namespace tailweir::kernel

// The fused pass for x86-64-v3. core/CMakeLists.txt builds this file, and only this file, with
// AVX2, FMA and contraction of a*b + c: nothing else may be included here.
#define TAILWEIR_KERNEL_NAMESPACE v3
#include "core/scatter/kernel_body.h"

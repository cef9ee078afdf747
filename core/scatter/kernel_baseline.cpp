// The fused pass for any x86-64 (built with the default flags).
#define TAILWEIR_KERNEL_NAMESPACE baseline
#include "core/scatter/kernel_body.h"

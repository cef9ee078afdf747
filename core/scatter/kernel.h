// The one hot loop: apply pending rank-one terms to a symmetric matrix and multiply it by up to two
// vectors in a single pass over its lower triangle.
//
//   P <- P + sum_k update_k.factor update_k.v update_k.v'      (k < updates)
//   y_k = P x_k                                                 (k < products, after the updates)
//
// Layout: column-major, p rounded up to a multiple of 4 rows and columns ("padded"), the 4 x 4
// blocks on the diagonal stored whole, everything above them neither read nor written. Padding of
// vectors and matrix is zero on entry and stays zero. The loop is compiled twice, for any x86-64
// and for x86-64-v3 (AVX2 and FMA), and chosen once at run time; each version has one fixed order
// of summation, so that results are reproducible on one kind of CPU. No Eigen type crosses this
// boundary. updates and products are 0, 1 or 2. Cost padded^2/2 (updates + 2 products)
// multiply-adds; allocates nothing. Thread rule: pure function of its arguments.
#pragma once

#include <cstddef>

namespace tailweir::kernel {

struct Update {
  double factor = 0;
  const double* v = nullptr;  // padded values
};

struct Product {
  const double* x = nullptr;  // padded values
  double* y = nullptr;        // padded values, overwritten
};

struct Pass {
  double* matrix = nullptr;  // padded x padded, columns `stride` doubles apart
  std::ptrdiff_t padded = 0;
  std::ptrdiff_t stride = 0;
  Update update[2];
  int updates = 0;
  Product product[2];
  int products = 0;
};

void run(const Pass& pass);

// Name of the version chosen on this machine: "x86-64" or "x86-64-v3".
const char* version_name();

namespace baseline {
void run(const Pass& pass);
}
namespace v3 {
void run(const Pass& pass);
}

}  // namespace tailweir::kernel

// Body of the fused pass, included by kernel_baseline.cpp and kernel_v3.cpp only (see kernel.h).
//
// Columns go four at a time. Below the diagonal block each group of four rows is one vector: the
// four column entries are updated, used for the row products (y of the rows) and for the column
// products (sums for y of the four columns) while they are in registers.
#pragma once

#include <cstring>

#include "core/scatter/kernel.h"

namespace tailweir::kernel::TAILWEIR_KERNEL_NAMESPACE {
namespace {

typedef double Four __attribute__((vector_size(32)));

inline Four load(const double* from) {
  Four value;
  std::memcpy(&value, from, sizeof value);
  return value;
}
inline void store(double* to, const Four& value) { std::memcpy(to, &value, sizeof value); }
inline Four spread(double value) { return Four{value, value, value, value}; }

template <int kUpdates, int kProducts>
void run_fixed(const Pass& pass) {
  const std::ptrdiff_t n = pass.padded;
  for (int k = 0; k < kProducts; ++k) {
    std::memset(pass.product[k].y, 0, static_cast<std::size_t>(n) * sizeof(double));
  }
  for (std::ptrdiff_t j = 0; j < n; j += 4) {
    double* column[4];
    Four left[2][4], right[2][4], sum[2][4];
    for (int c = 0; c < 4; ++c) {
      column[c] = pass.matrix + (j + c) * pass.stride;
      for (int k = 0; k < kUpdates; ++k) {
        left[k][c] = spread(pass.update[k].factor * pass.update[k].v[j + c]);
      }
      for (int k = 0; k < kProducts; ++k) {
        right[k][c] = spread(pass.product[k].x[j + c]);
        sum[k][c] = spread(0);
      }
    }
    // The diagonal block is stored whole: update it and use it as a small dense product.
    {
      Four entry[4];
      for (int c = 0; c < 4; ++c) {
        entry[c] = load(column[c] + j);
        for (int k = 0; k < kUpdates; ++k) entry[c] += left[k][c] * load(pass.update[k].v + j);
        if (kUpdates > 0) store(column[c] + j, entry[c]);
      }
      for (int k = 0; k < kProducts; ++k) {
        Four y = load(pass.product[k].y + j);
        for (int c = 0; c < 4; ++c) y += entry[c] * right[k][c];
        store(pass.product[k].y + j, y);
      }
    }
    for (std::ptrdiff_t i = j + 4; i < n; i += 4) {
      Four rows[2], x[2], y[2];
      for (int k = 0; k < kUpdates; ++k) rows[k] = load(pass.update[k].v + i);
      for (int k = 0; k < kProducts; ++k) {
        x[k] = load(pass.product[k].x + i);
        y[k] = load(pass.product[k].y + i);
      }
      for (int c = 0; c < 4; ++c) {
        Four entry = load(column[c] + i);
        for (int k = 0; k < kUpdates; ++k) entry += left[k][c] * rows[k];
        if (kUpdates > 0) store(column[c] + i, entry);
        for (int k = 0; k < kProducts; ++k) {
          y[k] += entry * right[k][c];
          sum[k][c] += entry * x[k];
        }
      }
      for (int k = 0; k < kProducts; ++k) store(pass.product[k].y + i, y[k]);
    }
    for (int k = 0; k < kProducts; ++k) {
      for (int c = 0; c < 4; ++c) {
        const Four s = sum[k][c];
        pass.product[k].y[j + c] += (s[0] + s[1]) + (s[2] + s[3]);
      }
    }
  }
}

}  // namespace

void run(const Pass& pass) {
  switch (pass.updates * 3 + pass.products) {
    case 1:
      return run_fixed<0, 1>(pass);
    case 2:
      return run_fixed<0, 2>(pass);
    case 3:
      return run_fixed<1, 0>(pass);
    case 4:
      return run_fixed<1, 1>(pass);
    case 5:
      return run_fixed<1, 2>(pass);
    case 6:
      return run_fixed<2, 0>(pass);
    case 7:
      return run_fixed<2, 1>(pass);
    case 8:
      return run_fixed<2, 2>(pass);
    default:
      return;
  }
}

}  // namespace tailweir::kernel::TAILWEIR_KERNEL_NAMESPACE

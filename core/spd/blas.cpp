#include "core/spd/blas.h"

#include <cblas.h>

#include <Eigen/Cholesky>
#include <Eigen/Eigenvalues>
#include <cassert>
#include <cmath>
#include <limits>

extern "C" {
void dpotrf_(const char* uplo, const int* n, double* a, const int* lda, int* info);
void dpotri_(const char* uplo, const int* n, double* a, const int* lda, int* info);
}

namespace tailweir::spd {
namespace {

// OpenBLAS starts with as many threads as cores; one is what keeps results and latency steady. Runs
// once, before main() or on the first call, whichever comes first.
bool single_threaded() {
  static const bool done = [] {
    openblas_set_num_threads(1);
    return true;
  }();
  return done;
}

int to_int(Index i) { return static_cast<int>(i); }

}  // namespace

bool cholesky(MatrixRef a) {
  assert(a.rows() == a.cols() && single_threaded());
  single_threaded();
  const int p = to_int(a.rows());
  const int stride = to_int(a.outerStride());
  int info = 0;
  dpotrf_("L", &p, a.data(), &stride, &info);
  if (info != 0) return false;
  // A not-a-number passes some LAPACK pivot tests: look at the diagonal.
  for (Index j = 0; j < a.rows(); ++j) {
    if (!(a(j, j) > 0) || !std::isfinite(a(j, j))) return false;
  }
  return true;
}

void multiply_transposed(const ConstMatrixRef& l, MatrixRef x) {
  assert(l.rows() == x.rows());
  single_threaded();
  cblas_dtrmm(CblasColMajor, CblasLeft, CblasLower, CblasTrans, CblasNonUnit, to_int(x.rows()),
              to_int(x.cols()), 1.0, l.data(), to_int(l.outerStride()), x.data(),
              to_int(x.outerStride()));
}

void multiply(const ConstMatrixRef& l, MatrixRef x) {
  assert(l.rows() == x.rows());
  single_threaded();
  cblas_dtrmm(CblasColMajor, CblasLeft, CblasLower, CblasNoTrans, CblasNonUnit, to_int(x.rows()),
              to_int(x.cols()), 1.0, l.data(), to_int(l.outerStride()), x.data(),
              to_int(x.outerStride()));
}

void solve(const ConstMatrixRef& l, MatrixRef x) {
  assert(l.rows() == x.rows());
  single_threaded();
  cblas_dtrsm(CblasColMajor, CblasLeft, CblasLower, CblasNoTrans, CblasNonUnit, to_int(x.rows()),
              to_int(x.cols()), 1.0, l.data(), to_int(l.outerStride()), x.data(),
              to_int(x.outerStride()));
}

void solve_transposed(const ConstMatrixRef& l, MatrixRef x) {
  assert(l.rows() == x.rows());
  single_threaded();
  cblas_dtrsm(CblasColMajor, CblasLeft, CblasLower, CblasTrans, CblasNonUnit, to_int(x.rows()),
              to_int(x.cols()), 1.0, l.data(), to_int(l.outerStride()), x.data(),
              to_int(x.outerStride()));
}

void add_gram(double alpha, const ConstMatrixRef& y, double beta, MatrixRef s) {
  assert(y.rows() == s.rows());
  single_threaded();
  cblas_dsyrk(CblasColMajor, CblasLower, CblasNoTrans, to_int(y.rows()), to_int(y.cols()), alpha,
              y.data(), to_int(y.outerStride()), beta, s.data(), to_int(s.outerStride()));
}

void add_inner_gram(double alpha, const ConstMatrixRef& y, double beta, MatrixRef s) {
  assert(y.cols() == s.rows());
  single_threaded();
  cblas_dsyrk(CblasColMajor, CblasLower, CblasTrans, to_int(y.cols()), to_int(y.rows()), alpha,
              y.data(), to_int(y.outerStride()), beta, s.data(), to_int(s.outerStride()));
}

void add_transposed_product(double alpha, const ConstMatrixRef& a, const ConstMatrixRef& b,
                            double beta, MatrixRef c) {
  assert(a.rows() == b.rows() && c.rows() == a.cols() && c.cols() == b.cols());
  single_threaded();
  cblas_dgemm(CblasColMajor, CblasTrans, CblasNoTrans, to_int(c.rows()), to_int(c.cols()),
              to_int(a.rows()), alpha, a.data(), to_int(a.outerStride()), b.data(),
              to_int(b.outerStride()), beta, c.data(), to_int(c.outerStride()));
}

void symmetric_multiply(const ConstMatrixRef& a, const double* x, double* y) {
  single_threaded();
  cblas_dsymv(CblasColMajor, CblasLower, to_int(a.rows()), 1.0, a.data(), to_int(a.outerStride()),
              x, 1, 0.0, y, 1);
}

void inverse_from_cholesky(MatrixRef l) {
  single_threaded();
  const int p = to_int(l.rows());
  const int stride = to_int(l.outerStride());
  int info = 0;
  dpotri_("L", &p, l.data(), &stride, &info);
  assert(info == 0);  // cholesky() has checked the diagonal
}

void mirror_lower(MatrixRef a) {
  const Index p = a.rows();
  for (Index j = 0; j < p; ++j) {
    for (Index i = j + 1; i < p; ++i) a(j, i) = a(i, j);
  }
}

double affine_invariant_distance(const Eigen::MatrixXd& a, const Eigen::MatrixXd& b) {
  constexpr double kInfinity = std::numeric_limits<double>::infinity();
  if (!a.allFinite() || !b.allFinite()) return kInfinity;
  const Eigen::LLT<Eigen::MatrixXd> factor(a);
  if (factor.info() != Eigen::Success) return kInfinity;
  Eigen::MatrixXd whitened = factor.matrixL().solve(b);
  whitened = factor.matrixL().solve(whitened.transpose()).eval();
  const Eigen::MatrixXd symmetric = .5 * (whitened + whitened.transpose());
  const Eigen::SelfAdjointEigenSolver<Eigen::MatrixXd> solver(symmetric, Eigen::EigenvaluesOnly);
  const Eigen::ArrayXd eigenvalues = solver.eigenvalues().array();
  if (!(eigenvalues.minCoeff() > 0)) return kInfinity;
  return std::sqrt(eigenvalues.log().square().sum());
}

}  // namespace tailweir::spd

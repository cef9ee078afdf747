// Dense linear algebra on lower triangles, in one place: thin wrappers over BLAS and LAPACK.
//
// Symmetric matrices live in the lower triangle of a column-major p x p matrix; the strictly upper
// triangle is neither read nor written unless said. BLAS runs on one thread, so that results do not
// depend on the machine's load. None of these allocates on our side (OpenBLAS keeps its own packing
// buffers). Sizes agree by precondition (asserted). Thread rule: safe to call from several threads
// on different data.
#pragma once

#include <Eigen/Core>

#include "core/settings.h"

namespace tailweir::spd {

using MatrixRef = Eigen::Ref<Eigen::MatrixXd, 0, Eigen::OuterStride<>>;
using ConstMatrixRef = Eigen::Ref<const Eigen::MatrixXd, 0, Eigen::OuterStride<>>;

// a (p x p, lower) <- its Cholesky factor L, a = L L'. False when a is not positive definite or not
// finite; a is then unspecified. p^3/6 multiply-adds.
[[nodiscard]] bool cholesky(MatrixRef a);

// x (p x k) <- L' x, with L (p x p) lower triangular. k p^2/2 multiply-adds.
void multiply_transposed(const ConstMatrixRef& l, MatrixRef x);

// x (p x k) <- L x, with L (p x p) lower triangular. k p^2/2 multiply-adds.
void multiply(const ConstMatrixRef& l, MatrixRef x);

// x (p x k) <- L^-1 x. k p^2/2 multiply-adds.
void solve(const ConstMatrixRef& l, MatrixRef x);

// x (p x k) <- L^-T x. k p^2/2 multiply-adds.
void solve_transposed(const ConstMatrixRef& l, MatrixRef x);

// s (p x p, lower) <- beta s + alpha y y', y p x k. k p^2/2 multiply-adds.
void add_gram(double alpha, const ConstMatrixRef& y, double beta, MatrixRef s);

// s (p x p, lower) <- beta s + alpha y' y, y k x p. k p^2/2 multiply-adds.
void add_inner_gram(double alpha, const ConstMatrixRef& y, double beta, MatrixRef s);

// c (m x n) <- beta c + alpha a' b, a k x m, b k x n. k m n multiply-adds.
void add_transposed_product(double alpha, const ConstMatrixRef& a, const ConstMatrixRef& b,
                            double beta, MatrixRef c);

// y (p) <- a x with a p x p symmetric, lower triangle read. p^2 multiply-adds.
void symmetric_multiply(const ConstMatrixRef& a, const double* x, double* y);

// l (p x p, lower Cholesky factor of a) <- lower triangle of a^-1. p^3/3 multiply-adds.
void inverse_from_cholesky(MatrixRef l);

// Copies the lower triangle of a square matrix onto its upper one.
void mirror_lower(MatrixRef a);

// |log eig(a^-1 b)|_F, the affine-invariant distance of two positive definite matrices (both
// triangles read); +infinity when a or b is not positive definite. Allocates. Source: Bhatia,
// "Positive Definite Matrices", Princeton University Press, 2007, chapter 6.
double affine_invariant_distance(const Eigen::MatrixXd& a, const Eigen::MatrixXd& b);

}  // namespace tailweir::spd

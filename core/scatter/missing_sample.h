// One sample with missing entries against a known precision matrix: imputation, distance, and the
// rank-|m| change of the precision that its conditional scatter makes.
//
// With P (p x p) the inverse of A, x zero where missing, b = P_mo x_o:
//   x^_m = -P_mm^-1 b,   q = x_o'(P x)_o - b' P_mm^-1 b = x^' P x^ = x_o' (A_oo)^-1 x_o,
//   P_mm^-1 = C C' (the conditional part of A), C upper triangular.
// P x^ is zero on m, so that the terms w x^ x^' and f C C' that a sample adds to A do not meet in
// P: (A + w x^ x^' + f E_m C C' E_m')^-1 = P - w/(1 + w q) (P x^)(P x^)' - f/(1 + f) V V' with
// V = P E_m C. Derived here; the conditional moments are the textbook ones (Liu & Rubin,
// Statistica Sinica 5, 1995). Nothing is allocated after construction. Thread rule: one owner.
#pragma once

#include <Eigen/Core>
#include <vector>

#include "core/settings.h"
#include "core/spd/blas.h"

namespace tailweir {

class MissingSample {
 public:
  // dimension: p (with the constant, when samples are lifted).
  explicit MissingSample(Index dimension);

  // precision: p x p positive definite, lower triangle read. x: p values, not-a-number where
  // missing; those are overwritten with x^. direction: p values, becomes P x^ (exactly zero where
  // missing). Returns q >= 0; not-a-number, with x as it was, when P_mm does not factorise. At
  // least one entry is observed. O(p^2 + |m|^2 p + |m|^3).
  double impute(const spd::ConstMatrixRef& precision, double* x, double* direction);

  // The same when `direction` already holds P x0, x0 the sample with zeros where missing: a tracker
  // has it from its own pass. O(|m|^2 p + |m|^3).
  double impute_multiplied(const spd::ConstMatrixRef& precision, double* x, double* direction);

  // Of the last impute(), until the next remove(): the missing channels in rising order, C (|m| x
  // |m|, upper triangle, the rest zero) and V = P E_m C (p x |m|). After adding f C C' to A the
  // precision is P - f/(1 + f) V V'.
  const std::vector<Index>& missing() const { return missing_; }
  Eigen::Ref<const Eigen::MatrixXd> conditional_factor() const;
  Eigen::Ref<const Eigen::MatrixXd> update() const;

  // Exact removal, later: f C C' with the stored `missing` and `factor` (|m| x |m|) leaves A.
  // precision: the current one, lower triangle read. Fills removal() (p x |m|) so that the new
  // precision is P + removal() removal()'. The part w x^ x^' leaves by its own rank-one downdate,
  // before or after, each against the precision of its moment. False when A would not stay
  // positive definite: rebuild. O(p |m|^2 + |m|^3).
  bool remove(const spd::ConstMatrixRef& precision, const std::vector<Index>& missing,
              const Eigen::Ref<const Eigen::MatrixXd>& factor, double f);
  Eigen::Ref<const Eigen::MatrixXd> removal() const;

 private:
  void gather(const spd::ConstMatrixRef& precision, const std::vector<Index>& missing);

  Index dimension_, removed_ = 0;
  std::vector<Index> missing_;
  Eigen::VectorXd rhs_;
  Eigen::MatrixXd columns_;  // P E_m
  Eigen::MatrixXd block_, factor_, update_, removal_;
};

}  // namespace tailweir

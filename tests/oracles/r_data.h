// Open data and reference routines of R, read at test time by running Rscript.
//
// Nothing is copied into the repository: the data sets live in the Debian packages r-base-core,
// r-cran-mass and r-cran-robustbase. A test that cannot run R fails; it is never skipped.
#pragma once

#include <Eigen/Core>
#include <string>

namespace tailweir::oracles {

// Evaluates an R expression that gives a numeric matrix, data frame or vector. Returns it as
// rows x columns (a vector as one column), 17 significant digits, NA as not-a-number. Throws
// std::runtime_error with R's message when R is missing or the expression fails.
Eigen::MatrixXd r_matrix(const std::string& expression);

// The same transposed: one sample a column, as the core takes it.
Eigen::MatrixXd r_samples(const std::string& expression);

// Expressions of the data sets that several tests use.
inline const char* const kEuStockReturns = "100*diff(log(EuStockMarkets))";  // R datasets, 1859 x 4
inline const char* const kStackLoss = "as.matrix(stackloss)";                // R datasets, 21 x 4
inline const char* const kBushfire =
    "{data(bushfire, package='robustbase'); as.matrix(bushfire)}";  // robustbase, 38 x 5
inline const char* const kNoxComplete =
    "{data(ambientNOxCH, package='robustbase'); as.matrix(log(na.omit(ambientNOxCH[,-1])))}";
inline const char* const kSp500 = "as.matrix(as.numeric(MASS::SP500))";  // MASS, 2780 x 1

}  // namespace tailweir::oracles

#include "tests/oracles/r_data.h"

#include <array>
#include <cstdio>
#include <cstdlib>
#include <limits>
#include <sstream>
#include <stdexcept>

namespace tailweir::oracles {

Eigen::MatrixXd r_matrix(const std::string& expression) {
  const std::string script = "m <- as.matrix(" + expression +
                             "); cat(nrow(m), ncol(m), '\\n'); cat(formatC(as.vector(t(m))+0.0, "
                             "digits=17, width=1, format='g'), sep='\\n')";
  std::string quoted;
  for (const char c : script) quoted += c == '\'' ? std::string("'\\''") : std::string(1, c);
  const std::string command = "Rscript --vanilla -e '" + quoted + "' 2>&1";
  FILE* pipe = popen(command.c_str(), "r");
  if (pipe == nullptr) throw std::runtime_error("cannot run Rscript (package r-base-core)");
  std::string output;
  std::array<char, 65536> buffer;
  for (std::size_t n = 0; (n = fread(buffer.data(), 1, buffer.size(), pipe)) > 0;) {
    output.append(buffer.data(), n);
  }
  if (pclose(pipe) != 0) {
    throw std::runtime_error(
        "Rscript failed (packages r-base-core, r-cran-mass, "
        "r-cran-robustbase): " +
        output.substr(0, 500));
  }
  std::istringstream in(output);
  Eigen::Index rows = 0, columns = 0;
  if (!(in >> rows >> columns))
    throw std::runtime_error("Rscript printed: " + output.substr(0, 200));
  Eigen::MatrixXd m(rows, columns);
  std::string word;
  for (Eigen::Index i = 0; i < rows; ++i) {
    for (Eigen::Index j = 0; j < columns; ++j) {
      if (!(in >> word)) throw std::runtime_error("Rscript printed too few values");
      m(i, j) = word == "NA" || word == "NaN" ? std::numeric_limits<double>::quiet_NaN()
                                              : std::strtod(word.c_str(), nullptr);
    }
  }
  return m;
}

Eigen::MatrixXd r_samples(const std::string& expression) {
  return r_matrix(expression).transpose();
}

}  // namespace tailweir::oracles

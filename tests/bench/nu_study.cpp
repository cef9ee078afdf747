// Study of the estimators of nu: mean square error, bias and interval coverage over a grid of nu,
// channels p and samples n. Zero centre known, AR(1) 0.6 scatter, equal masses, cold estimates.
//
//   tailweir_nu_study [--runs N] [--results FILE] [--nu 3,10] [--p 10] [--n 40,60] [--report]
//
// Results are appended to FILE in batches of kBatch runs, so an interrupted study goes on where it
// stopped; a batch's seed depends on its cell and number only. --report prints the tables of what
// FILE holds and runs nothing. Estimates are clipped to [0.3, 1000] before errors are taken. Every
// ratio is against POP ("Improved estimation of the degree of freedom parameter of multivariate
// t-distribution", EUSIPCO 2021) on the same samples; its standard error is a jackknife over
// batches. Timing decides nothing here.
#include <unistd.h>

#include <algorithm>
#include <array>
#include <cmath>
#include <cstdint>
#include <cstdio>
#include <cstdlib>
#include <fstream>
#include <functional>
#include <map>
#include <random>
#include <sstream>
#include <string>
#include <tuple>
#include <utility>
#include <vector>

#include "core/tail/tail.h"
#include "tests/reference/reference.h"

namespace {

using tailweir::Index;
using tailweir::NuMethod;

constexpr int kBatch = 20;
constexpr const char* kFormat = "nu-study-1";

// The last column has no run of its own: it is LOO-F before its light-tail blend.
constexpr std::array<std::pair<const char*, NuMethod>, 6> kRun = {
    {{"kurtosis", NuMethod::kurtosis},
     {"likelihood", NuMethod::likelihood},
     {"POP", NuMethod::pop},
     {"trace ratio", NuMethod::trace_ratio},
     {"censored", NuMethod::censored},
     {"LOO-F", NuMethod::leave_one_out}}};
constexpr std::size_t kPop = 2, kLooF = 5, kUnblended = 6, kColumns = 7;

const char* name_of(std::size_t k) { return k == kUnblended ? "unblended" : kRun[k].first; }

struct Cell {
  double nu = 0;
  Index p = 0, n = 0;
  bool operator<(const Cell& o) const { return std::tie(nu, p, n) < std::tie(o.nu, o.p, o.n); }
};

// Sums over runs of one estimator.
struct Sums {
  double error = 0, square = 0;                  // of nu
  double inverse_error = 0, inverse_square = 0;  // of 1/nu
  double covered = 0;                            // runs whose interval holds the truth
  double above = 0;                              // runs whose estimate is above the truth

  void add(const Sums& o, double sign = 1) {
    error += sign * o.error;
    square += sign * o.square;
    inverse_error += sign * o.inverse_error;
    inverse_square += sign * o.inverse_square;
    covered += sign * o.covered;
    above += sign * o.above;
  }
};
using Row = std::array<Sums, kColumns>;
using Batches = std::map<int, Row>;  // batch number -> sums
using Results = std::map<Cell, Batches>;

void add_estimate(double truth, double nu, const tailweir::tail::NuEstimate& e, Sums& sums) {
  const double clipped = std::clamp(nu, .3, 1000.);
  const double error = clipped - truth, inverse = 1 / clipped - 1 / truth;
  sums.add({error, error * error, inverse, inverse * inverse,
            e.nu_low <= truth && truth <= e.nu_high ? 1. : 0., clipped > truth ? 1. : 0.});
}

Row run_batch(const Cell& cell, int batch) {
  std::seed_seq seeds{static_cast<int>(std::lround(cell.nu * 1000)), static_cast<int>(cell.p),
                      static_cast<int>(cell.n), batch};
  std::mt19937_64 bits(seeds);
  const Eigen::ArrayXd mass = Eigen::ArrayXd::Ones(cell.n);
  Row row;
  for (int run = 0; run < kBatch; ++run) {
    const Eigen::MatrixXd x = tailweir::reference::t_samples(cell.p, cell.n, cell.nu, bits);
    for (std::size_t k = 0; k < kRun.size(); ++k) {
      tailweir::NuSettings settings;
      settings.method = kRun[k].second;
      const tailweir::tail::NuEstimate e = tailweir::tail::estimate_nu(x, mass, {}, settings);
      add_estimate(cell.nu, e.nu, e, row[k]);
      if (k == kLooF) add_estimate(cell.nu, e.unblended, e, row[kUnblended]);
    }
  }
  return row;
}

std::string line_of(const Cell& cell, int batch, const Row& row) {
  std::ostringstream line;
  line.precision(17);
  line << kFormat << ' ' << cell.nu << ' ' << cell.p << ' ' << cell.n << ' ' << batch;
  for (const Sums& s : row) {
    line << ' ' << s.error << ' ' << s.square << ' ' << s.inverse_error << ' ' << s.inverse_square
         << ' ' << s.covered << ' ' << s.above;
  }
  line << " end\n";
  return line.str();
}

// Lines that are cut off or of another format are passed over.
Results load(const std::string& path) {
  Results results;
  std::ifstream file(path);
  for (std::string line; std::getline(file, line);) {
    std::istringstream in(line);
    std::string format, end;
    Cell cell;
    int batch = 0;
    Row row;
    in >> format >> cell.nu >> cell.p >> cell.n >> batch;
    for (Sums& s : row) {
      in >> s.error >> s.square >> s.inverse_error >> s.inverse_square >> s.covered >> s.above;
    }
    in >> end;
    if (format == kFormat && end == "end") results[cell][batch] = row;
  }
  return results;
}

// ---------------------------------------------------------------------------------------- report

double runs_of(const Batches& batches) { return static_cast<double>(batches.size()) * kBatch; }

Row total_of(const Batches& batches) {
  Row total;
  for (const auto& [number, row] : batches) {
    for (std::size_t k = 0; k < kColumns; ++k) total[k].add(row[k]);
  }
  return total;
}

double ratio_of(const Row& row, std::size_t k, double Sums::*what) {
  return row[kPop].*what > 0 ? row[k].*what / (row[kPop].*what) : NAN;
}

// Standard error of ln(ratio) of LOO-F, leaving out one batch at a time.
double ratio_error(const Batches& batches, const Row& total, double Sums::*what) {
  const double count = static_cast<double>(batches.size());
  double sum = 0, square = 0;
  for (const auto& [number, row] : batches) {
    Row rest = total;
    for (const std::size_t j : {kLooF, kPop}) rest[j].add(row[j], -1);
    const double value = std::log(ratio_of(rest, kLooF, what));
    sum += value;
    square += value * value;
  }
  return std::sqrt(std::max(0., (count - 1) * (square / count - std::pow(sum / count, 2))));
}

// Geometric means of the ratios of one nu.
struct Means {
  std::array<double, kColumns> sum{};
  std::array<int, kColumns> count{};
};

void print_means(const std::map<double, Means>& means) {
  std::printf("\nGeometric means over the cells with n > p:\n\n");
  for (const auto& [nu, m] : means) {
    std::printf("- nu %g:", nu);
    for (std::size_t k = 0; k < kColumns; ++k) {
      if (k != kPop) std::printf(" %s %.3f;", name_of(k), std::exp(m.sum[k] / m.count[k]));
    }
    std::printf("\n");
  }
}

void print_ratios(const Results& results, double Sums::*what, const char* title) {
  std::printf("\n### %s\n\n| nu | p | n | runs |", title);
  for (std::size_t k = 0; k < kColumns; ++k) {
    if (k != kPop) std::printf(" %s |", name_of(k));
  }
  std::printf(" +- | POP itself |\n|---|---|---|---|");
  for (std::size_t k = 0; k < kColumns + 1; ++k) std::printf("---|");
  std::printf("\n");
  std::map<double, Means> means;
  std::string poor;
  for (const auto& [cell, batches] : results) {
    const Row total = total_of(batches);
    std::printf("| %g | %td | %td | %g |", cell.nu, cell.p, cell.n, runs_of(batches));
    for (std::size_t k = 0; k < kColumns; ++k) {
      if (k == kPop) continue;
      const double ratio = ratio_of(total, k, what);
      std::printf(" %.3f |", ratio);
      if (cell.n <= cell.p || !(ratio > 0)) continue;
      means[cell.nu].sum[k] += std::log(ratio);
      ++means[cell.nu].count[k];
    }
    std::printf(" %.3f | %.4g |\n", ratio_error(batches, total, what),
                total[kPop].*what / runs_of(batches));
    if (ratio_of(total, kLooF, what) > 1.1) {
      char text[96];
      std::snprintf(text, sizeof text, "- nu %g, p %td, n %td: %.3f%s\n", cell.nu, cell.p, cell.n,
                    ratio_of(total, kLooF, what), 2 * cell.n < 3 * cell.p ? " (n < 1.5 p)" : "");
      poor += text;
    }
  }
  print_means(means);
  std::printf("\nCells where LOO-F is above 1.10:\n\n%s", poor.empty() ? "- none\n" : poor.c_str());
}

void print_bias(const Results& results) {
  std::printf(
      "\n### Bias and intervals\n\nMean error of nu and of 1/nu, share of estimates above the "
      "truth, share of 95%% intervals that hold it.\n\n"
      "| nu | p | n | LOO-F bias nu | bias 1/nu | above | coverage | POP bias nu | above | "
      "coverage | likelihood coverage |\n|---|---|---|---|---|---|---|---|---|---|---|\n");
  for (const auto& [cell, batches] : results) {
    const Row total = total_of(batches);
    const double runs = runs_of(batches);
    const Sums& a = total[kLooF];
    const Sums& b = total[kPop];
    std::printf("| %g | %td | %td | %.3g | %.3g | %.2f | %.3f | %.3g | %.2f | %.3f | %.3f |\n",
                cell.nu, cell.p, cell.n, a.error / runs, a.inverse_error / runs, a.above / runs,
                a.covered / runs, b.error / runs, b.above / runs, b.covered / runs,
                total[1].covered / runs);
  }
}

// --------------------------------------------------------------------------------------- command

struct Options {
  int runs = 60;
  std::string results = "nu_study.results";
  bool report = false;
  std::vector<double> nu = {2.5, 3, 4, 6, 10, 30}, p = {10, 30, 40}, n = {40, 60, 100, 200, 500};
};

std::vector<double> numbers(const std::string& text) {
  std::vector<double> values;
  std::istringstream in(text);
  for (std::string word; std::getline(in, word, ',');) values.push_back(std::stod(word));
  return values;
}

bool parse(int count, char** words, Options& options) {
  const std::map<std::string, std::function<void(const std::string&)>> known = {
      {"--runs", [&](const std::string& v) { options.runs = std::stoi(v); }},
      {"--results", [&](const std::string& v) { options.results = v; }},
      {"--nu", [&](const std::string& v) { options.nu = numbers(v); }},
      {"--p", [&](const std::string& v) { options.p = numbers(v); }},
      {"--n", [&](const std::string& v) { options.n = numbers(v); }}};
  for (int k = 1; k < count; ++k) {
    const std::string word = words[k];
    if (word == "--report") {
      options.report = true;
      continue;
    }
    const auto entry = known.find(word);
    if (entry == known.end() || k + 1 == count) return false;
    try {
      entry->second(words[++k]);
    } catch (const std::exception&) {
      return false;
    }
  }
  return options.runs >= 1;
}

void show_progress(std::size_t done, std::size_t all) {
  if (isatty(STDERR_FILENO) == 0) return;
  constexpr std::size_t kWidth = 50;
  const std::size_t full = kWidth * done / all;
  std::fprintf(stderr, "\r[%s%s] %zu/%zu%s", std::string(full, '#').c_str(),
               std::string(kWidth - full, '.').c_str(), done, all, done == all ? "\n" : "");
}

// Batch by batch over all cells, so that an unfinished study is a thinner study of every cell.
bool run(const Options& options, Results& results) {
  std::ofstream file(options.results, std::ios::app);
  if (!file) {
    std::fprintf(stderr, "cannot write %s\n", options.results.c_str());
    return false;
  }
  file << '\n';  // ends a line that an interrupted study left open
  const int batches = (options.runs + kBatch - 1) / kBatch;
  const std::size_t cells = options.nu.size() * options.p.size() * options.n.size();
  std::size_t done = 0;
  for (int batch = 0; batch < batches; ++batch) {
    for (const double nu : options.nu) {
      for (const double p : options.p) {
        for (const double n : options.n) {
          const Cell cell{nu, static_cast<Index>(p), static_cast<Index>(n)};
          Batches& known = results[cell];
          if (!known.contains(batch)) {
            known[batch] = run_batch(cell, batch);
            file << line_of(cell, batch, known[batch]) << std::flush;
          }
          show_progress(++done, cells * static_cast<std::size_t>(batches));
        }
      }
    }
  }
  return static_cast<bool>(file);
}

}  // namespace

int main(int count, char** words) {
  Options options;
  if (!parse(count, words, options)) {
    std::fprintf(stderr,
                 "usage: tailweir_nu_study [--runs N] [--results FILE] [--nu LIST] [--p LIST] "
                 "[--n LIST] [--report]\n");
    return 2;
  }
  Results results = load(options.results);
  if (!options.report && !run(options, results)) return 1;
  print_ratios(results, &Sums::square, "Mean square error of nu relative to POP");
  print_ratios(results, &Sums::inverse_square, "Mean square error of 1/nu relative to POP");
  print_bias(results);
  return 0;
}

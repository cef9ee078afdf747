// The tracker's cost and accuracy as ratios within one run: push against SYMV, polish against
// SYRK + TRSM, the amortised total against this project's own cold refit and against
// MASS::cov.trob, error before and after a polish in units of statistical error, the longest
// sample.
//
//   tailweir_engine_study [--r]      prints a Markdown table; --r adds the comparison with R
//
// Times are medians of repeated blocks on one thread (the longest sample in processor time); ratios
// are what to read on a shared machine.
#include <cblas.h>
#include <time.h>

#include <Eigen/Cholesky>
#include <algorithm>
#include <chrono>
#include <cmath>
#include <cstdio>
#include <cstring>
#include <random>
#include <vector>

#include "core/scatter/fixed_point.h"
#include "core/scatter/kernel.h"
#include "core/scatter/tracker.h"
#include "core/spd/blas.h"
#include "tests/oracles/r_data.h"

namespace {

using namespace tailweir;
using Clock = std::chrono::steady_clock;

double microseconds(Clock::time_point from) {
  return std::chrono::duration<double, std::micro>(Clock::now() - from).count();
}

// Processor time of this thread: what others do on a shared machine does not count. A microsecond a
// call, so for the longest sample only.
double processor_microseconds() {
  timespec t{};
  clock_gettime(CLOCK_THREAD_CPUTIME_ID, &t);
  return 1e6 * static_cast<double>(t.tv_sec) + 1e-3 * static_cast<double>(t.tv_nsec);
}

double median(std::vector<double> values) {
  std::sort(values.begin(), values.end());
  return values[values.size() / 2];
}

// Median over blocks of the mean time of one call.
template <typename Call>
double time_of(int blocks, int calls, Call call) {
  std::vector<double> times;
  for (int b = 0; b < blocks; ++b) {
    const auto begin = Clock::now();
    for (int k = 0; k < calls; ++k) call();
    times.push_back(microseconds(begin) / calls);
  }
  return median(times);
}

class Stream {
 public:
  Stream(Index p, double nu) : p_(p), gamma_(nu / 2, 2 / nu) {}
  void next(Eigen::VectorXd& x) {
    const double scale = 1 / std::sqrt(gamma_(bits_));
    double before = 0;
    for (Index j = 0; j < p_; ++j) {
      before = j == 0 ? normal_(bits_) : .6 * before + .8 * normal_(bits_);
      x(j) = before * scale;
    }
  }

 private:
  Index p_;
  std::mt19937_64 bits_{7};
  std::normal_distribution<double> normal_;
  std::gamma_distribution<double> gamma_;
};

struct Row {
  Index p, n;
  double symv, push, polish_limit, polish, total, cold, before, after, longest, trob;
};

double cov_trob_microseconds(Index p, Index n) {
  const std::string script = "{library(MASS); set.seed(1); x <- matrix(rt(" +
                             std::to_string(n * p) + ", 4), " + std::to_string(n) +
                             "); t <- system.time(for (i in 1:3) cov.trob(x, nu=4, center=FALSE, "
                             "maxit=1000, tol=1e-8))[3]; matrix(t/3*1e6)}";
  return oracles::r_matrix(script)(0, 0);
}

Row measure(Index p, Index n, bool with_r) {
  Row row{};
  row.p = p;
  row.n = n;
  const double size = static_cast<double>(p);
  Stream stream(p, 4);
  const Index samples = 5 * n;
  std::vector<Eigen::VectorXd> past(static_cast<std::size_t>(samples), Eigen::VectorXd(p));
  for (Eigen::VectorXd& x : past) stream.next(x);
  Eigen::MatrixXd truth(p, p);
  for (Index i = 0; i < p; ++i) {
    for (Index j = 0; j < p; ++j) truth(i, j) = std::pow(.6, std::abs(static_cast<double>(i - j)));
  }

  // Limits of this machine, now.
  const int calls = static_cast<int>(std::clamp(2e7 / (size * size), 3., 20000.));
  Eigen::MatrixXd a = truth;
  Eigen::VectorXd y(p);
  row.symv = time_of(9, calls, [&] { spd::symmetric_multiply(a, past[0].data(), y.data()); });
  Eigen::MatrixXd block(p, n), factor = truth;
  if (!spd::cholesky(factor)) return row;
  for (Index k = 0; k < n; ++k) block.col(k) = past[static_cast<std::size_t>(k)];
  const int few =
      static_cast<int>(std::clamp(2e8 / (size * size * static_cast<double>(n)), 1., 2000.));
  Eigen::MatrixXd work = block;
  row.polish_limit = time_of(7, few, [&] {
    work = block;
    spd::solve(factor, work);
    spd::add_gram(1, work, 0, a);
  });

  // The tracker: time by what each sample did.
  TrackerSettings settings;
  settings.channels = p;
  settings.memory = {Memory::Kind::window_samples, static_cast<double>(n)};
  Tracker tracker(settings, 4);
  std::vector<double> plain;
  double all = 0, polished = 0, statistical = 0;
  Index counted = 0, polishes = 0;
  for (Index t = 0; t < samples; ++t) {
    const Eigen::VectorXd& x = past[static_cast<std::size_t>(t)];
    const auto begin = Clock::now();
    tracker.predict(x, t);
    tracker.absorb();
    const double took = microseconds(begin);
    if (t < 2 * n) continue;
    ++counted;
    all += took;
    if (tracker.health().iterations == 0) {
      plain.push_back(took);
      continue;
    }
    ++polishes;
    polished += took;
    if (p > 100 && polishes > 2) continue;
    Eigen::MatrixXd window(p, n), s;
    Eigen::VectorXd m;
    for (Index k = 0; k < n; ++k) window.col(k) = past[static_cast<std::size_t>(t - n + 1 + k)];
    FixedPointSettings how;
    how.tolerance = 1e-10;
    tracker.scatter(s, m);
    const FixedPoint exact = fit_scatter(window, Eigen::ArrayXd::Ones(n), how, s);
    row.after += std::pow(spd::affine_invariant_distance(exact.scatter, s), 2);
    row.before += std::pow(tracker.health().residual_at_polish, 2);
    statistical += std::pow(spd::affine_invariant_distance(truth, exact.scatter), 2);
  }
  Tracker again(settings, 4);
  for (Index t = 0; t < samples; ++t) {
    const double begin = processor_microseconds();
    again.predict(past[static_cast<std::size_t>(t)], t);
    again.absorb();
    if (t >= 2 * n) row.longest = std::max(row.longest, processor_microseconds() - begin);
  }
  row.push = median(plain);
  row.total = all / static_cast<double>(counted);
  row.polish = polishes > 0 ? polished / static_cast<double>(polishes) : 0;
  row.before = std::sqrt(row.before / statistical);
  row.after = std::sqrt(row.after / statistical);
  FixedPointSettings how;
  how.tolerance = 1e-8;
  row.cold = time_of(3, 1, [&] { fit_scatter(block, Eigen::ArrayXd::Ones(n), how); });
  if (with_r) row.trob = cov_trob_microseconds(p, n);
  return row;
}

}  // namespace

int main(int argc, char** argv) {
  const bool with_r = argc > 1 && std::strcmp(argv[1], "--r") == 0;
  openblas_set_num_threads(1);
  std::printf("kernel %s; sliding window, nu 4, AR(1) .6, zero centre; times in us, one thread\n\n",
              kernel::version_name());
  std::printf(
      "| p, n | SYMV | push | push/SYMV | polish/(SYRK+TRSM) | total/push | cold refit/total |");
  std::printf(" cov.trob/total | error before | after | longest sample |\n");
  std::printf("|---|---|---|---|---|---|---|---|---|---|---|\n");
  for (const Index p : {10, 30, 100, 300}) {
    for (const Index ratio : {5, 10}) {
      if (p == 300 && ratio == 10) continue;
      const Row row = measure(p, p * ratio, with_r);
      std::printf(
          "| %ld, %ld | %.3g | %.3g | %.2f | %.2f | %.2f | %.0f | %s | %.3f | %.4f | %.0f |\n",
          static_cast<long>(row.p), static_cast<long>(row.n), row.symv, row.push,
          row.push / row.symv, row.polish / row.polish_limit, row.total / row.push,
          row.cold / row.total,
          with_r ? std::to_string(static_cast<long>(row.trob / row.total)).c_str() : "-",
          row.before, row.after, row.longest);
      std::fflush(stdout);
    }
  }
  return 0;
}

// Prints the measured behaviour of the detection: detect_study [--runs N] [--part NAME]
//
// Parts: cost, flags, channels, worlds, delays, life, recovery, shape, eu-free. Without --part all.
// Fixed seeds; every table says what was simulated. N scales all run counts (default 400).
#include <algorithm>
#include <chrono>
#include <cmath>
#include <cstdio>
#include <cstdlib>
#include <cstring>
#include <string>
#include <vector>

#include "core/detect/alerts.h"
#include "core/detect/calibration.h"
#include "core/detect/flags.h"
#include "core/detect/thresholds.h"
#include "core/scatter/tracker.h"
#include "tests/core/detect_worlds.h"

using namespace tailweir;
using namespace tailweir::detect;
using namespace tailweir::detect_test;

namespace {

double now() {
  return std::chrono::duration<double>(std::chrono::steady_clock::now().time_since_epoch()).count();
}

void cost(int) {
  std::printf(
      "\ncost a sample, microseconds: flags (score), alerts without shape, shape monitor\n");
  for (int p : {4, 10, 30, 100, 300}) {
    SampleGenerator random(1);
    const int count = 20000;
    Eigen::VectorXd x(p), q(p), diagonal = Eigen::VectorXd::Ones(p);
    Flags flags(p, {});
    AlertSettings settings;
    settings.channels = p;
    settings.shape = false;
    Alerts alerts(settings);
    ShapeSettings shape_settings;
    shape_settings.channels = p;
    ShapeMonitor shape(shape_settings);
    double spent[3] = {0, 0, 0};
    for (int t = -6000; t < count; ++t) {
      random.sample(8, x);
      q = x;
      const ScoredSample sample{x.squaredNorm(), x, q, diagonal};
      const double a = now();
      flags.score(sample, {5. * p, 8, false});
      const double b = now();
      AlertInput input;
      input.distance = sample.distance;
      input.fitted = flags.fit().ready();
      input.nu = flags.fit().nu();
      input.log_scale = flags.fit().log_scale();
      alerts.push(input);
      const double c = now();
      if (p <= 100 || t > count - 3000) shape.push(x);
      const double d = now();
      if (t < 0) continue;
      spent[0] += b - a;
      spent[1] += c - b;
      if (p <= 100 || t > count - 3000) spent[2] += d - c;
    }
    std::printf("p %3d: %.2f %.2f %.2f\n", p, spent[0] / count * 1e6, spent[1] / count * 1e6,
                spent[2] / (p <= 100 ? count : 3000) * 1e6);
  }
}

// Flags through a real tracker at the true nu, n = 5p, scatter I.
void flags(int runs) {
  std::printf("\nfalse flags over nominal through a tracker, running fit on\n");
  for (int p : {4, 20, 100}) {
    for (double nu : {4., 8., 30.}) {
      SampleGenerator random(7);
      TrackerSettings settings;
      settings.channels = p;
      settings.memory = {Memory::Kind::window_samples, 5. * p};
      Tracker tracker(settings, nu);
      Flags flags(p, {});
      Eigen::VectorXd x(p), centred(p), q(p), diagonal(p);
      const double rates[3] = {1e-2, 1e-3, 1e-4};
      double joint[3] = {}, channel[3] = {}, combined[3] = {};
      std::int64_t counted = 0;
      const int total = (p == 100 ? 500 : 2500) * runs;
      for (int t = 0; t < total; ++t) {
        random.sample(nu, x);
        const double d = tracker.predict(x, t);
        if (tracker.tracking() && tracker.health().samples_effective >= 5. * p - 1) {
          tracker.residuals(q, diagonal);
          tracker.centred(centred);
          const FlagScore score = flags.score({d, centred, q, diagonal}, {5. * p, nu, false});
          if (score.fitted) {
            ++counted;
            for (int k = 0; k < 3; ++k) {
              joint[k] += score.joint <= rates[k];
              channel[k] += score.channel <= .5 * rates[k];
              combined[k] += score.combined <= rates[k];
            }
          }
        }
        tracker.absorb();
      }
      std::printf("p %3d nu %2g n %d, %lld samples:", p, nu, 5 * p,
                  static_cast<long long>(counted));
      const double n = static_cast<double>(counted);
      std::printf(" joint");
      for (int k = 0; k < 3; ++k) std::printf(" %.2f", joint[k] / n / rates[k]);
      std::printf("  channel (half rate)");
      for (int k = 0; k < 3; ++k) std::printf(" %.2f", 2 * channel[k] / n / rates[k]);
      std::printf("  combined");
      for (int k = 0; k < 3; ++k) std::printf(" %.2f", combined[k] / n / rates[k]);
      std::printf("  (fit nu %.2f)\n", flags.fit().nu());
      std::fflush(stdout);
    }
  }
}

// One channel moved by 6 conditional standard deviations, scatter estimated from n samples.
void channels(int runs) {
  std::printf(
      "\none channel at +6 conditional standard deviations, rate 1e-3: flagged, named first\n");
  for (double nu : {5., 8., 30.}) {
    for (int n : {100, 200}) {
      const int p = 20;
      SampleGenerator random(11);
      TrackerSettings settings;
      settings.channels = p;
      settings.memory = {Memory::Kind::window_samples, static_cast<double>(n)};
      Tracker tracker(settings, nu);
      Flags flags(p, {});
      Eigen::VectorXd x(p), centred(p), q(p), diagonal(p);
      std::vector<ChannelPart> parts;
      int tried = 0, flagged = 0, first = 0, joint = 0;
      for (int t = 0; t < 2000 + 50 * runs; ++t) {
        random.sample(nu, x);
        if (t >= 2000 && t % 5 == 0) {
          Eigen::VectorXd moved = x;
          moved[3] += 6;  // in conditional scatter units: harder than in standard deviations
          const double d = tracker.predict(moved, t);
          tracker.residuals(q, diagonal);
          tracker.centred(centred);
          const ScoredSample sample{d, centred, q, diagonal};
          const FlagScore score = flags.score(sample, {double(n), nu, false}, false);
          ++tried;
          joint += score.joint <= 1e-3;
          if (score.combined <= 1e-3) {
            ++flagged;
            flags.attribute(sample, {double(n), nu, false}, 5, parts);
            first += parts[0].channel == 3;
          }
        }
        const double d = tracker.predict(x, t);
        if (tracker.tracking()) {
          tracker.residuals(q, diagonal);
          tracker.centred(centred);
          flags.score({d, centred, q, diagonal}, {double(n), nu, false});
        }
        tracker.absorb();
      }
      std::printf("p 20 n %d nu %g: power %.3f (joint alone %.3f), first in %.3f of flags\n", n, nu,
                  double(flagged) / tried, double(joint) / tried, double(first) / flagged);
      std::fflush(stdout);
    }
  }
}

// A monitor with its reference learned in the world and armed for 300 samples without an open
// alert.
template <typename Next>
bool settle(TailMonitor& monitor, Next next) {
  int armed = 0;
  for (int t = 0; t < 6000; ++t) {
    monitor.push(next());
    armed = monitor.stage() == AlertStage::armed ? armed + 1 : 0;
    if (armed >= 300) return true;
  }
  return false;
}

TailSettings settings_for(double p) {
  TailSettings settings;
  settings.channels = p;
  return settings;
}

void worlds(int runs) {
  std::printf(
      "\nP(tail raise within 1000), 5000 nominal a direction, reference learned and guarded\n");
  for (double p : {4., 20., 100.}) {
    for (World world : kWorlds) {
      int heavier = 0, lighter = 0, used = 0;
      for (int run = 0; run < runs; ++run) {
        SampleGenerator random(1000 + static_cast<std::uint64_t>(run));
        Volatility volatility(world, p, 8);
        TailMonitor monitor(settings_for(p));
        if (!settle(monitor, [&] { return volatility.log_distance(random, false); })) continue;
        ++used;
        bool up = false, down = false;
        for (int t = 0; t < 1000; ++t) {
          if (monitor.push(volatility.log_distance(random, true)) &&
              monitor.alert().stage == AlertStage::raised) {
            (monitor.alert().direction == AlertDirection::heavier ? up : down) = true;
          }
        }
        heavier += up;
        lighter += down;
      }
      std::printf("p %3g nu 8 %-20s heavier %.3f lighter %.3f (%d runs)\n", p, name(world),
                  double(heavier) / used, double(lighter) / used, used);
      std::fflush(stdout);
    }
  }
}

void delays(int runs) {
  std::printf("\nmean delay of the raise, reference learned and guarded (right direction only)\n");
  const double cases[][3] = {{20, 8, 4}, {20, 8, 3},  {100, 8, 4},
                             {4, 8, 4},  {20, 8, 16}, {20, 30, 8}};
  for (const auto& c : cases) {
    double sum = 0;
    int used = 0;
    for (int run = 0; run < runs; ++run) {
      SampleGenerator random(5000 + static_cast<std::uint64_t>(run));
      TailMonitor monitor(settings_for(c[0]));
      if (!settle(monitor, [&] { return random.log_distance(c[0], c[1]); })) continue;
      const AlertDirection wanted = c[2] < c[1] ? AlertDirection::heavier : AlertDirection::lighter;
      for (int t = 1; t < 4000; ++t) {
        if (monitor.push(random.log_distance(c[0], c[2])) &&
            monitor.alert().stage == AlertStage::raised && monitor.alert().direction == wanted) {
          sum += t;
          ++used;
          break;
        }
      }
    }
    std::printf("p %3g nu %g -> %g: %.1f (%d runs)\n", c[0], c[1], c[2], sum / used, used);
    std::fflush(stdout);
  }
}

void life(int runs) {
  std::printf(
      "\nconfirmed share of raises and delay of confirmation, reference known, p 20 nu 8\n");
  for (double target : {8., 4., 3., 16.}) {
    std::int64_t raises = 0, confirmed = 0, delay = 0, samples = 0;
    for (int run = 0; run < runs; ++run) {
      SampleGenerator random(9000 + static_cast<std::uint64_t>(run));
      TailSettings settings = settings_for(20);
      settings.known_nu = 8;
      TailMonitor monitor(settings);
      for (int t = 0; t < 300; ++t) monitor.push(random.log_distance(20, 8));
      if (monitor.stage() != AlertStage::armed) continue;
      for (int t = 0; t < (target == 8 ? 20000 : 1500); ++t) {
        ++samples;
        if (!monitor.push(random.log_distance(20, target))) continue;
        const Alert& alert = monitor.alert();
        if (alert.stage == AlertStage::raised) ++raises;
        if (alert.stage == AlertStage::confirmed) {
          ++confirmed;
          delay += alert.changed_at - alert.raised_at;
        }
        if (target != 8 &&
            (alert.stage == AlertStage::confirmed || alert.stage == AlertStage::dismissed)) {
          break;
        }
      }
    }
    std::printf(
        "to %g: %lld raises in %lld samples, confirmed %.3f, %.0f samples after the raise\n",
        target, static_cast<long long>(raises), static_cast<long long>(samples),
        double(confirmed) / double(raises),
        double(delay) / double(std::max<std::int64_t>(1, confirmed)));
    std::fflush(stdout);
  }
}

// Change at 0, back at `back`; the alert must be confirmed by then.
void recovery(int runs) {
  std::printf(
      "\nrecovery: nu 8 -> 4 (or 3) -> 8, reference learned; re-reference put off to 100000\n");
  for (double p : {20., 100.}) {
    for (double changed : {4., 3., 5.}) {
      for (int back : {200, 400}) {
        std::vector<double> delay;
        int used = 0, missed = 0, early = 0;
        std::int64_t exposed = 0;
        for (int run = 0; run < runs; ++run) {
          SampleGenerator random(13000 + static_cast<std::uint64_t>(run));
          TailSettings settings = settings_for(p);
          settings.re_reference_after = 100000;
          TailMonitor monitor(settings);
          if (!settle(monitor, [&] { return random.log_distance(p, 8); })) continue;
          bool confirmed = false, gone = false;
          for (int t = 0; t < back && !gone; ++t) {
            exposed += monitor.stage() == AlertStage::confirmed;
            if (!monitor.push(random.log_distance(p, changed))) continue;
            confirmed = monitor.stage() == AlertStage::confirmed;
            gone = monitor.alert().stage == AlertStage::recovered;
          }
          early += gone;
          if (!confirmed || gone) continue;
          ++used;
          int t = 1;
          for (; t <= 1500; ++t) {
            if (monitor.push(random.log_distance(p, 8)) &&
                monitor.alert().stage == AlertStage::recovered) {
              break;
            }
          }
          missed += t > 1500;
          delay.push_back(t);
        }
        double mean = 0;
        for (double d : delay) mean += d / static_cast<double>(delay.size());
        std::sort(delay.begin(), delay.end());
        std::printf(
            "p %3g to %g, back after %d: mean %.1f, median %.0f, 90%% %.0f, never %d of %d; false "
            "recoveries %d in %lld confirmed samples\n",
            p, changed, back, mean, delay[delay.size() / 2], delay[delay.size() * 9 / 10], missed,
            used, early, static_cast<long long>(exposed));
        std::fflush(stdout);
      }
    }
  }
  std::printf("false recovery while the change lasts (re-reference put off)\n");
  for (double changed : {4., 3., 2.}) {
    std::int64_t exposed = 0, recovered = 0;
    for (int run = 0; run < runs / 4; ++run) {
      SampleGenerator random(17000 + static_cast<std::uint64_t>(run));
      TailSettings settings = settings_for(20);
      settings.re_reference_after = 100000;
      TailMonitor monitor(settings);
      if (!settle(monitor, [&] { return random.log_distance(20, 8); })) continue;
      for (int t = 0; t < 3000; ++t) {
        exposed += monitor.stage() == AlertStage::confirmed;
        if (monitor.push(random.log_distance(20, changed)) &&
            monitor.alert().stage == AlertStage::recovered) {
          ++recovered;
        }
      }
    }
    std::printf("p 20 at %g: one in %.0f samples (%lld)\n", changed,
                double(exposed) / double(std::max<std::int64_t>(1, recovered)),
                static_cast<long long>(recovered));
    std::fflush(stdout);
  }
}

void shape(int runs) {
  std::printf("\nshape: P(raise within 1000) quiet at 5000 nominal; equicorrelation 0 -> rho\n");
  for (int p : {4, 10, 20}) {
    for (double rho : {0., .1, .2, .3}) {
      int raised = 0, confirmed = 0;
      double delay = 0;
      const int used = std::max(20, runs / 4);
      for (int run = 0; run < used; ++run) {
        SampleGenerator random(21000 + static_cast<std::uint64_t>(run));
        ShapeSettings settings;
        settings.channels = p;
        ShapeMonitor monitor(settings);
        Eigen::VectorXd x(p);
        const auto draw = [&](double r) {
          random.sample(8, x);
          const double common = random.normal();
          x = std::sqrt(1 - r) * x +
              Eigen::VectorXd::Constant(
                  p, std::sqrt(r) * common * std::sqrt(8 / random.chi_square(8)));
        };
        for (int t = 0; t < 50 * p; ++t) {
          draw(0);
          monitor.push(x);
        }
        if (monitor.active()) continue;
        for (int t = 1; t <= 1000; ++t) {
          draw(rho);
          if (!monitor.push(x)) continue;
          if (monitor.alert().stage == AlertStage::raised) {
            ++raised;
            delay += t;
          }
          confirmed += monitor.alert().stage == AlertStage::confirmed;
          if (monitor.alert().stage != AlertStage::raised) break;
        }
      }
      std::printf("p %2d rho %.1f: raised %.2f confirmed %.2f mean delay %.0f\n", p, rho,
                  double(raised) / used, double(confirmed) / used, delay / std::max(1, raised));
      std::fflush(stdout);
    }
  }
}

}  // namespace

int main(int count, char** values) {
  int runs = 400;
  std::string part;
  for (int i = 1; i + 1 < count; i += 2) {
    if (std::strcmp(values[i], "--runs") == 0) runs = std::atoi(values[i + 1]);
    if (std::strcmp(values[i], "--part") == 0) part = values[i + 1];
  }
  const struct {
    const char* name;
    void (*run)(int);
  } parts[] = {{"cost", cost},     {"flags", flags}, {"channels", channels}, {"worlds", worlds},
               {"delays", delays}, {"life", life},   {"recovery", recovery}, {"shape", shape}};
  for (const auto& entry : parts) {
    if (part.empty() || part == entry.name) entry.run(runs);
  }
}

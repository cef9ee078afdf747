// What every monitor says: the alert, its life, and its words.
//
// armed -> raised -> confirmed or dismissed -> recovered or re-referenced. A raise keeps the sample
// the change is dated to and the value it was raised for; confirmation uses fresh samples only, by
// Wald's sequential test (Wald, Ann. Math. Stat. 16, 1945): L = sum of log-likelihood ratios from
// the sample after the raise, confirmed at +ln 20, dismissed at -ln 20. Thread rule: plain values.
#pragma once

#include <Eigen/Core>
#include <cstdint>
#include <string>

namespace tailweir::detect {

enum class AlertKind { tail = 0, scale = 1, shape = 2 };
enum class AlertDirection { heavier = 0, lighter = 1, up = 2, down = 3, any = 4 };
enum class AlertStage {
  learning = 0,  // no reference yet: nothing is watched
  armed = 1,
  raised = 2,
  confirmed = 3,
  dismissed = 4,     // fresh samples spoke against it; watched again from the next sample
  recovered = 5,     // back where it was; watched again
  re_referenced = 6  // the change stayed: the new state becomes the reference
};

inline constexpr double kWaldBound = 2.995732273553991;  // ln 20
inline constexpr double kWaldCap = 1;                    // largest step of L, nats

struct Alert {
  AlertKind kind = AlertKind::tail;
  AlertDirection direction = AlertDirection::heavier;
  AlertStage stage = AlertStage::armed;
  std::int64_t id = 0;          // counts raises of the monitor
  std::int64_t since = 0;       // first sample of the change, estimated
  std::int64_t raised_at = 0;   // sample of the raise
  std::int64_t changed_at = 0;  // sample of the last change of stage
  double statistic = 0, threshold = 0;
  // tail: nu; scale: volatility as a multiple of the reference's (1); shape: excess of Q over
  // quiet.
  double from = 0, to = 0;
  double wald = 0;                       // L; 0 at the raise
  Eigen::Index first = -1, second = -1;  // shape: the worst pair of channels
  bool explained = false;                // dismissed because a change of higher rank explains it
  bool open() const { return stage == AlertStage::raised || stage == AlertStage::confirmed; }
};

// Odds of change against no change on the fresh samples, as a probability: 1/(1 + e^-L). One half
// at the raise, .952 when confirmed.
double confidence(const Alert& alert);

// What changed, from what to what, since when, with what confidence, in one line of words. `now`:
// number of the current sample. names: the channels of a shape alert; empty strings print numbers.
std::string describe(const Alert& alert, std::int64_t now, const std::string& first_name = "",
                     const std::string& second_name = "");

const char* word(AlertKind kind);
const char* word(AlertDirection direction);
const char* word(AlertStage stage);

}  // namespace tailweir::detect

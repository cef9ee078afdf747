#include "core/detect/alert.h"

#include <cmath>
#include <cstdio>

namespace tailweir::detect {

namespace {
std::string number(double value) {
  char text[32];
  std::snprintf(text, sizeof text, "%.3g", value);
  return text;
}

std::string change(const Alert& alert, const std::string& first, const std::string& second) {
  switch (alert.kind) {
    case AlertKind::tail:
      return std::string("tails got ") + word(alert.direction) + ": degrees of freedom from " +
             number(alert.from) + " to about " + number(alert.to) +
             ", volatility changes filtered out";
    case AlertKind::scale:
      return std::string("volatility went ") + word(alert.direction) + ": about " +
             number(alert.to) + " times the reference";
    case AlertKind::shape:
      break;
  }
  const auto name = [](const std::string& given, Eigen::Index index) {
    return given.empty() ? "channel " + std::to_string(index + 1) : given;
  };
  std::string text = "correlations moved: statistic " + number(alert.to) + " where " +
                     number(alert.from) + " is quiet";
  if (alert.first >= 0) {
    text += ", most between " + name(first, alert.first) + " and " + name(second, alert.second);
  }
  return text;
}
}  // namespace

double confidence(const Alert& alert) { return 1 / (1 + std::exp(-alert.wald)); }

std::string describe(const Alert& alert, std::int64_t now, const std::string& first_name,
                     const std::string& second_name) {
  std::string text = change(alert, first_name, second_name);
  text += "; since " + std::to_string(now - alert.since) + " samples ago; ";
  text += word(alert.stage);
  switch (alert.stage) {
    case AlertStage::raised:
      return text + ", not yet confirmed (statistic " + number(alert.statistic) + ", threshold " +
             number(alert.threshold) + ")";
    case AlertStage::confirmed:
      return text + " with confidence " + number(confidence(alert)) + " on samples after the raise";
    case AlertStage::dismissed:
      return text + (alert.explained ? ": a change of correlation or scale explains it"
                                     : ": samples after the raise speak against it");
    case AlertStage::recovered:
      return text + ": back at " + number(alert.from);
    case AlertStage::re_referenced:
      return text + ": the change stayed and is the new reference";
    case AlertStage::learning:
    case AlertStage::armed:
      break;
  }
  return text;
}

const char* word(AlertKind kind) {
  switch (kind) {
    case AlertKind::tail:
      return "tail";
    case AlertKind::scale:
      return "scale";
    case AlertKind::shape:
      break;
  }
  return "shape";
}

const char* word(AlertDirection direction) {
  switch (direction) {
    case AlertDirection::heavier:
      return "heavier";
    case AlertDirection::lighter:
      return "lighter";
    case AlertDirection::up:
      return "up";
    case AlertDirection::down:
      return "down";
    case AlertDirection::any:
      break;
  }
  return "any";
}

const char* word(AlertStage stage) {
  switch (stage) {
    case AlertStage::learning:
      return "learning";
    case AlertStage::armed:
      return "armed";
    case AlertStage::raised:
      return "raised";
    case AlertStage::confirmed:
      return "confirmed";
    case AlertStage::dismissed:
      return "dismissed";
    case AlertStage::recovered:
      return "recovered";
    case AlertStage::re_referenced:
      break;
  }
  return "re-referenced";
}

}  // namespace tailweir::detect

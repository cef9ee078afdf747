// JSON lines of records: golden bytes, undefined numbers, and a JSON library as second reader.
#include "service/report/record_lines.h"

#include <gtest/gtest.h>

#include <cmath>
#include <cstring>
#include <limits>
#include <nlohmann/json.hpp>
#include <random>

namespace tailweir {
namespace {

constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();

std::vector<PanelDescription> descriptions() {
  return {{"metals", {"copper", "tin"}, {"slow", "fast"}, 1}, {"one", {"a.b"}, {"h"}, 3}};
}

EstimateRecord estimate() {
  EstimateRecord record;
  record.sequence = 1234;
  record.time_ns = 1772357400250000000;
  record.horizon = 1;
  record.estimate.state = HorizonState::live;
  record.estimate.reason = StateReason::none;
  record.estimate.nu = 4.25;
  record.estimate.nu_low = 3.5;
  record.estimate.nu_high = 5.0625;
  record.estimate.nu_status = tail::NuStatus::estimated;
  record.estimate.nu_fit = 4.25;
  record.estimate.covariance_factor = 4.25 / 2.25;
  record.estimate.samples_effective = 250;
  record.estimate.log_volatility = -4.5;
  record.estimate.residual = 1e-11;
  record.estimate.iterations = 2;
  record.estimate.since_polish = 17;
  record.estimate.distance = 3.5;
  record.estimate.p_value = 0.1;
  record.estimate.condition = 12.5;
  record.centre = {0, -0.0};
  record.scatter = {1.5, -0.1, 1e300};
  return record;
}

const char* const kLiveLine =
    R"({"sequence":1234,"time":"2026-03-01T09:30:00.250000000Z","panel":"metals","horizon":"fast",)"
    R"("state":"live","state_reason":"none","channels":2,"channels_version":1,)"
    R"("nu":4.25,"nu_low":3.5,"nu_high":5.0625,"nu_status":"estimated","nu_fit":4.25,)"
    R"("centre":[0,-0],"scatter":[1.5,-0.1,1e+300],"covariance_factor":1.8888888888888888,)"
    R"("samples_effective":250,"log_volatility":-4.5,"residual":1e-11,"iterations":2,)"
    R"("since_polish":17,"distance":3.5,"p_value":0.1,"coverage":1,"condition":12.5,"flagged":false})"
    "\n";

std::string line_of(const Record& record,
                    MatricesPolicy policy = {MatricesPolicy::Kind::every, 1}) {
  const RecordLines lines(descriptions(), policy);
  EXPECT_TRUE(lines.knows(record));
  std::string out;
  lines.append(record, out);
  return out;
}

TEST(RecordLines, LiveEstimateHasTheseBytes) { EXPECT_EQ(line_of(estimate()), kLiveLine); }

TEST(RecordLines, WarmingEstimateHasTheseBytes) {
  EstimateRecord record;
  record.sequence = 1;
  record.panel = 1;
  record.channels_version = 3;
  record.estimate.samples_effective = 1;
  record.estimate.distance = record.estimate.p_value = kNaN;
  EXPECT_EQ(
      line_of(record),
      R"({"sequence":1,"time":"1970-01-01T00:00:00.000000000Z","panel":"one","horizon":"h",)"
      R"("state":"warming","state_reason":"too_few_samples","channels":1,)"
      R"("channels_version":3,"nu":null,"nu_low":null,"nu_high":null,"nu_status":"not_identified",)"
      R"("nu_fit":null,"centre":null,"scatter":null,"covariance_factor":null,)"
      R"("samples_effective":1,"log_volatility":null,"residual":null,"iterations":0,)"
      R"("since_polish":0,"distance":null,"p_value":null,"coverage":1,"condition":null,"flagged":false})"
      "\n");
}

TEST(RecordLines, FlagHasTheseBytes) {
  FlagRecord record;
  record.sequence = 9;
  record.time_ns = -1;
  record.flag.distance = 51.5;
  record.flag.p_value = 2.5e-5;
  record.flag.severity = Severity::severe;
  record.flag.channels = {{1, -0.25, -7.5, 51.25, 4.5e-5}, {0, 0.5, kNaN, 0.25, 0.75}};
  record.flagged = 3;
  record.flagged_expected = 0.75;
  EXPECT_EQ(
      line_of(record),
      R"({"sequence":9,"time":"1969-12-31T23:59:59.999999999Z","panel":"metals","horizon":"slow",)"
      R"("distance":51.5,"p_value":2.5e-05,"joint_p_value":0,"rank_p_value":0,"severity":"severe","flagged":3,)"
      R"("flagged_expected":0.75,"channels":[{"name":"tin",)"
      R"("value":-0.25,"residual":-7.5,"share":51.25,"p_value":4.5e-05},{"name":"copper",)"
      R"("value":0.5,"residual":null,"share":0.25,"p_value":0.75}]})"
      "\n");
}

TEST(RecordLines, MatricesFollowThePolicy) {
  EstimateRecord record = estimate();
  const auto has_matrices = [&record](MatricesPolicy policy) {
    return line_of(record, policy).find("\"scatter\":[") != std::string::npos;
  };
  EXPECT_TRUE(has_matrices({MatricesPolicy::Kind::every, 2}));
  record.sequence = 1235;
  EXPECT_FALSE(has_matrices({MatricesPolicy::Kind::every, 2}));
  EXPECT_FALSE(has_matrices({MatricesPolicy::Kind::flagged, 1}));
  EXPECT_FALSE(has_matrices({MatricesPolicy::Kind::never, 1}));
  record.flagged = true;
  EXPECT_TRUE(has_matrices({MatricesPolicy::Kind::flagged, 1}));
  EXPECT_EQ(parse_matrices_policy("every").value().every, 1U);
  EXPECT_EQ(parse_matrices_policy("250").value().every, 250U);
  EXPECT_EQ(parse_matrices_policy("flagged").value().kind, MatricesPolicy::Kind::flagged);
  EXPECT_EQ(parse_matrices_policy("never").value().kind, MatricesPolicy::Kind::never);
  for (const char* bad : {"", "0", "-1", "all", "12x", "99999999999999999999999"}) {
    EXPECT_FALSE(parse_matrices_policy(bad).ok()) << bad;
  }
}

TEST(RecordLines, CovarianceFactorIsNullWithoutACovariance) {
  EstimateRecord record = estimate();
  record.estimate.nu = 2;
  record.estimate.covariance_factor = std::numeric_limits<double>::infinity();
  EXPECT_NE(line_of(record).find("\"covariance_factor\":null"), std::string::npos);
}

TEST(RecordLines, KnowsOnlyRecordsThatFitTheDescriptions) {
  const RecordLines lines(descriptions(), {});
  EstimateRecord record = estimate();
  record.panel = 2;
  EXPECT_FALSE(lines.knows(record));
  record = estimate();
  record.horizon = 2;
  EXPECT_FALSE(lines.knows(record));
  record = estimate();
  record.scatter.pop_back();
  EXPECT_FALSE(lines.knows(record));
  FlagRecord flag;
  flag.flag.channels = {{2, 0, 0, 0, 0}};
  EXPECT_FALSE(lines.knows(flag));
  flag.flag.channels[0].channel = -1;
  EXPECT_FALSE(lines.knows(flag));
}

TEST(RecordLines, EveryDoubleReadsBackTheSame) {
  // Reference: nlohmann-json as second reader; random bit patterns, seed 29.
  std::mt19937_64 random(29);
  for (int i = 0; i < 2000; ++i) {
    EstimateRecord record = estimate();
    for (double& value : record.scatter) {
      const std::uint64_t bits = random();
      std::memcpy(&value, &bits, sizeof value);
    }
    const nlohmann::json read = nlohmann::json::parse(line_of(record));
    for (std::size_t k = 0; k < record.scatter.size(); ++k) {
      if (std::isfinite(record.scatter[k])) {
        ASSERT_EQ(read["scatter"][k].get<double>(), record.scatter[k]);
      } else {
        ASSERT_TRUE(read["scatter"][k].is_null());
      }
    }
  }
}

TEST(RecordLines, EscapesNamesOfAForeignDaemon) {
  const RecordLines lines({{"a\"b\\\n", {"c"}, {"h"}, 1}}, {});
  std::string out;
  EstimateRecord record;
  lines.append(record, false, out);
  EXPECT_EQ(nlohmann::json::parse(out)["panel"], "a\"b\\\n");
}

}  // namespace
}  // namespace tailweir

// validate(): the first wrong member is named by its key, and good settings pass unchanged.
#include "core/settings.h"

#include <gtest/gtest.h>

#include <cmath>
#include <functional>

namespace tailweir {
namespace {

PanelSettings good() {
  PanelSettings panel;
  panel.name = "demo";
  panel.channels = 4;
  HorizonSettings fast;
  fast.name = "fast";
  fast.memory = {Memory::Kind::window_samples, 40};
  HorizonSettings slow;
  slow.name = "slow";
  slow.memory = {Memory::Kind::half_life_samples, 100};
  panel.horizons = {fast, slow};
  return panel;
}

TEST(PanelSettings, DefaultsWithAHorizonPass) {
  const Result<PanelSettings> checked = validate(good());
  ASSERT_TRUE(checked.ok());
  EXPECT_EQ(checked.value().channels, 4);
  EXPECT_EQ(checked.value().horizons.size(), 2U);
}

TEST(PanelSettings, FirstWrongMemberIsNamedByItsKey) {
  const struct {
    const char* where;
    std::function<void(PanelSettings&)> spoil;
  } cases[] = {
      {"channels", [](PanelSettings& p) { p.channels = 0; }},
      {"horizons", [](PanelSettings& p) { p.horizons.clear(); }},
      {"horizons.fast", [](PanelSettings& p) { p.horizons[1].name = "fast"; }},
      {"horizons.fast.window", [](PanelSettings& p) { p.horizons[0].memory.length = 0; }},
      {"horizons.fast.window", [](PanelSettings& p) { p.horizons[0].memory.length = NAN; }},
      {"horizons.fast.window", [](PanelSettings& p) { p.horizons[0].memory.length = 4; }},
      {"horizons.fast.window", [](PanelSettings& p) { p.horizons[0].memory.length = 40.5; }},
      {"horizons.slow.half_life", [](PanelSettings& p) { p.horizons[1].memory.length = -1; }},
      {"horizons.slow.half_life", [](PanelSettings& p) { p.horizons[1].memory.length = .5; }},
      {"horizons.fast.tolerance", [](PanelSettings& p) { p.horizons[0].tolerance = 0; }},
      {"degrees_of_freedom.floor", [](PanelSettings& p) { p.nu.floor = 0; }},
      {"degrees_of_freedom.ceiling", [](PanelSettings& p) { p.nu.ceiling = .2; }},
      {"degrees_of_freedom.ceiling", [](PanelSettings& p) { p.nu.ceiling = INFINITY; }},
      {"degrees_of_freedom.prior_rate", [](PanelSettings& p) { p.nu.prior_rate = -1; }},
      {"degrees_of_freedom",
       [](PanelSettings& p) {
         p.nu.method = NuMethod::fixed;
         p.nu.fixed = 0;
       }},
      {"degrees_of_freedom",
       [](PanelSettings& p) {
         p.nu.method = NuMethod::fixed;
         p.nu.fixed = 1;
         p.centre.kind = CentreKind::estimated;
       }},
      {"centre",
       [](PanelSettings& p) {
         p.centre.kind = CentreKind::given;
         p.centre.given = Eigen::VectorXd::Zero(3);
       }},
      {"shrinkage.intensity", [](PanelSettings& p) { p.shrinkage.intensity = 1.5; }},
      {"shrinkage.target",
       [](PanelSettings& p) {
         p.shrinkage.target = ShrinkageTarget::given;
         p.shrinkage.given = -Eigen::MatrixXd::Identity(4, 4);
       }},
      {"shrinkage.target",
       [](PanelSettings& p) {
         p.shrinkage.target = ShrinkageTarget::given;
         p.shrinkage.given = Eigen::MatrixXd::Identity(3, 3);
       }},
      {"shrinkage.target",
       [](PanelSettings& p) {
         p.shrinkage.target = ShrinkageTarget::given;
         p.shrinkage.given = Eigen::MatrixXd::Identity(4, 4);
         p.shrinkage.given(0, 1) = .5;
       }},
      {"flags.rate", [](PanelSettings& p) { p.flags.rate = 0; }},
      {"flags.severe_rate", [](PanelSettings& p) { p.flags.severe_rate = .5; }},
  };
  for (const auto& c : cases) {
    PanelSettings panel = good();
    c.spoil(panel);
    const Result<PanelSettings> checked = validate(panel);
    ASSERT_FALSE(checked.ok()) << c.where;
    EXPECT_EQ(checked.fault().where, c.where);
    EXPECT_FALSE(checked.fault().what.empty());
    EXPECT_FALSE(checked.fault().allowed.empty());
  }
}

// A window as short as the channels is allowed when the scatter is shrunk.
TEST(PanelSettings, ShrinkageAllowsShortWindows) {
  PanelSettings panel = good();
  panel.horizons[0].memory.length = 3;
  panel.shrinkage.target = ShrinkageTarget::identity;
  EXPECT_TRUE(validate(panel).ok());
}

}  // namespace
}  // namespace tailweir

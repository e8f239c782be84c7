#include "tapwright/equalizer/knobs.hpp"

#include <gtest/gtest.h>

#include <stdexcept>

namespace tapwright {
namespace {

Device device() {
  Device d;
  d.transmitter.swings = {{0, 0.2}, {1, 0.3}, {2, 0.4}};
  d.transmitter.fir = {{{-1, -0.25, 0.0, codes_from_step(-0.25, 0.0, 0.0125), false},
                        {0, 0.5, 1.0, {}, true},
                        {1, -0.4, 0.0, codes_from_step(-0.4, 0.0, 0.0125), false}},
                       1.0,
                       {}};
  for (int c = 0; c < 3; ++c) {
    for (int g = 0; g < 2; ++g) {
      d.receiver.ctle.push_back({c, "-" + std::to_string(c) + " dB",
                                 CtleReference{-1.0 * c, 1e9, 1e9, 4e9, {}}, Code{g, 1.0 + g}});
    }
  }
  d.receiver.dfe = {{1, 0.05, false, codes_from_step(-0.05, 0.05, 0.002)}, {2, 0.1, true, {}}};
  return d;
}

Settings settings() {
  Settings s;
  s.swing_index = 1;
  s.fir = Eigen::Vector3d(-0.05, 0.8, -0.15);
  s.ctle_index = 3;  // state 1, gain 1
  s.dfe_v = Eigen::Vector2d(0.05, 0.01);
  return s;
}

TEST(Knobs, AreReadInTheUnitsAndCodesOfTheDevice) {
  const auto all = readings(device(), settings());
  ASSERT_EQ(all.size(), 8u);  // swing, three FIR, CTLE, gain, two DFE
  EXPECT_EQ(all[0].knob.name, "swing");
  EXPECT_DOUBLE_EQ(all[0].value, 600.0);
  EXPECT_EQ(all[1].knob.name, "fir:-1");
  EXPECT_EQ(all[1].code, -4);
  EXPECT_FALSE(all[2].code.has_value());  // the remainder has no code of its own
  EXPECT_EQ(all[3].code, -12);
  EXPECT_EQ(all[4].code, 1);
  EXPECT_EQ(all[4].shown, "-1 dB");
  EXPECT_EQ(all[5].code, 1);
  EXPECT_TRUE(all[5].at_most);
  EXPECT_EQ(all[6].code, 25);
  EXPECT_TRUE(all[6].at_most);
  EXPECT_FALSE(all[6].at_least);
  EXPECT_EQ(all[7].shown, "+10.0 mV");
}

TEST(Knobs, MoveByOneCodeInsideTheLimitsOnly) {
  const Device d = device();
  const Settings s = settings();
  const auto knobs = knobs_of(d);
  const auto fir = moved(d, s, knobs[1], -1, 0.2);
  ASSERT_TRUE(fir);
  EXPECT_NEAR(fir->fir[0], -0.0625, 1e-15);
  EXPECT_NEAR(fir->fir[1], 0.7875, 1e-15);  // the remainder follows
  EXPECT_FALSE(moved(d, s, knobs[2], 1, 0.2));  // and can't be moved itself
  EXPECT_EQ(moved(d, s, knobs[4], 1, 0.2)->ctle_index, 5u);   // state 2, same gain
  EXPECT_EQ(moved(d, s, knobs[5], -1, 0.2)->ctle_index, 2u);  // same state, gain 0
  EXPECT_FALSE(moved(d, s, knobs[5], 1, 0.2));
  EXPECT_FALSE(moved(d, s, knobs[6], 1, 0.2));
  EXPECT_NEAR(moved(d, s, knobs[6], -1, 0.2)->dfe_v[0], 0.048, 1e-15);
  // Without codes: 1/100 of the range of +-0.1 times a main cursor of 0.2 V.
  EXPECT_NEAR(moved(d, s, knobs[7], 1, 0.2)->dfe_v[1], 0.01 + 0.0004, 1e-15);
  Settings flat = s;
  flat.fir = Eigen::Vector3d(-0.25, 0.5, -0.25);
  EXPECT_FALSE(moved(d, flat, knobs[3], -1, 0.2));  // main would fall under 0.5
}

TEST(Knobs, RefuseSettingsOfAnotherDevice) {
  Settings s = settings();
  s.dfe_v = Eigen::VectorXd::Zero(1);
  EXPECT_THROW((void)readings(device(), s), std::invalid_argument);
  s = settings();
  s.ctle_index = 6;
  EXPECT_THROW((void)moved(device(), s, knobs_of(device())[0], 1, 0.1), std::invalid_argument);
}

}  // namespace
}  // namespace tapwright

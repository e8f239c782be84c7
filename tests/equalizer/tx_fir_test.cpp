#include "tapwright/equalizer/tx_fir.hpp"

#include <gtest/gtest.h>

#include <limits>
#include <random>
#include <stdexcept>

#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

constexpr double kEps = std::numeric_limits<double>::epsilon();

FirLimits three_taps() {
  return {{{-1, -0.25, 0.0, codes_from_step(-0.25, 0.0, 0.0125), false},
           {0, 0.5, 1.0, {}, true},
           {1, -0.4, 0.0, codes_from_step(-0.4, 0.0, 0.0125), false}},
          1.0,
          {}};
}

TEST(Codes, CountTheMultiplesOfTheStep) {
  const auto codes = codes_from_step(-0.25, 0.0, 0.0125);
  ASSERT_EQ(codes.size(), 21u);
  EXPECT_EQ(codes.front(), (Code{-20, -0.25}));
  EXPECT_EQ(codes.back(), (Code{0, 0.0}));
  EXPECT_TRUE(codes_from_step(0.1, 0.2, 0.3).empty());
  EXPECT_THROW((void)codes_from_step(0.0, 1.0, 0.0), std::invalid_argument);
  EXPECT_THROW((void)codes_from_step(1.0, 0.0, 0.1), std::invalid_argument);
  EXPECT_THROW((void)codes_from_step(0.0, 1.0, 1e-6), std::invalid_argument);
}

TEST(TxFir, KeepsTheAreaOfThePulseScaledByTheTapSum) {
  const PulseResponse pulse(Eigen::VectorXd::LinSpaced(64, 0.3, -0.1), 8, 100e-12);
  const Eigen::Vector3d taps(-0.1, 0.75, -0.15);
  const FilteredPulse out = apply(three_taps(), taps, pulse);
  EXPECT_EQ(out.pulse.size(), 64 + 16);
  EXPECT_EQ(out.shift, 8);
  // Rounding only: each side adds up at most 80 samples + 3 taps.
  const double scale_v = taps.lpNorm<1>() * pulse.samples_v().lpNorm<1>();
  EXPECT_NEAR(out.pulse.samples_v().sum(), taps.sum() * pulse.samples_v().sum(),
              83 * kEps * scale_v);
}

TEST(TxFir, PulseAndCursorsAgree) {
  std::mt19937_64 random(7);
  Eigen::VectorXd samples(160);
  for (double& v : samples) v = static_cast<double>(random() >> 11) * 0x1p-53 - 0.5;
  const PulseResponse pulse(samples, 4, 1e-10);
  const Eigen::Vector3d taps(-0.1, 0.7, -0.2);
  const FilteredPulse q = apply(three_taps(), taps, pulse);
  const CursorRow row = apply(three_taps(), taps, CursorRow{cursors_at(pulse, 61, 15, 24), 15});
  for (Eigen::Index k = -16; k <= 25; ++k) {
    EXPECT_NEAR(row.at(k), q.pulse.at(q.shift + 61 + 4 * k), 4 * kEps) << k;
  }
}

TEST(TxFir, LimitsAreTestedInCodesNotInFloatingPoint) {
  const FirLimits limits = three_taps();
  // 0.1 + 0.7 + 0.2 is not 1 in binary; the register codes add up exactly.
  EXPECT_TRUE(keeps_limits(limits, with_remainder(limits, Eigen::Vector3d(-0.1, 0.0, -0.2))));
  EXPECT_TRUE(keeps_limits(limits, Eigen::Vector3d(-0.1, 0.7, -0.2)));
  EXPECT_FALSE(keeps_limits(limits, Eigen::Vector3d(-0.1, 0.7125, -0.2)));   // over the peak
  EXPECT_FALSE(keeps_limits(limits, Eigen::Vector3d(-0.11, 0.7, -0.1)));     // no code
  EXPECT_FALSE(keeps_limits(limits, Eigen::Vector3d(-0.25, 0.35, -0.4)));    // main under 0.5
  FirLimits with_main = limits;
  with_main.min_main = 0.75;
  EXPECT_FALSE(keeps_limits(with_main, Eigen::Vector3d(-0.1, 0.7, -0.2)));
  EXPECT_THROW((void)keeps_limits(limits, Eigen::Vector2d(0.0, 1.0)), std::invalid_argument);
}

// What a transmitter launches at bit n: the sum of taps times the symbols that meet there.
double launch(const Eigen::Vector3d& taps, int before, int now, int after) {
  return taps[0] * after + taps[1] * now + taps[2] * before;
}

struct Preset {
  Eigen::Vector3d taps;
  double preshoot_db, deemphasis_db;
};

TEST(TxFir, LaunchLevelsFollowThePresetTable) {
  // PCI Express base specification, preset table (ratios from memory; levels derived here): Va the
  // first bit after a transition, Vb a repeated bit, Vc the last bit before a transition.
  // Preshoot Vc/Vb, de-emphasis Vb/Va.
  for (const Preset& p : {Preset{{-0.1, 0.7, -0.2}, 3.52, -6.02}, Preset{{0, 0.75, -0.25}, 0.0, -6.02},
                          Preset{{-0.125, 0.75, -0.125}, 3.52, -3.52}}) {
    const FirLimits limits{{{-1, -0.25, 0, {}, false}, {0, 0, 1, {}, false}, {1, -0.4, 0, {}, false}},
                           1.0,
                           {}};
    ASSERT_TRUE(keeps_limits(limits, p.taps));
    // The held launch pulse of each symbol, through apply(): run 1 1 1 after and before -1.
    const PulseResponse nrz(Eigen::VectorXd::Ones(1), 1, 1e-10);
    const Eigen::VectorXd fir = apply(limits, p.taps, nrz).pulse.samples_v();
    ASSERT_EQ(fir.size(), 3);
    EXPECT_EQ(Eigen::Vector3d(fir), p.taps);
    const double va = launch(fir, -1, 1, 1);
    const double vb = launch(fir, 1, 1, 1);
    const double vc = launch(fir, 1, 1, -1);
    EXPECT_NEAR(ratio_to_amplitude_db(vc / vb), p.preshoot_db, 0.005);
    EXPECT_NEAR(ratio_to_amplitude_db(vb / va), p.deemphasis_db, 0.005);
    // Common practice: with a negative post-cursor the first bit after a transition is larger than
    // the repeated ones, and no pattern launches over the swing.
    EXPECT_GT(va, vb);
    for (int bits = 0; bits < 8; ++bits) {
      const auto sign = [&](int n) { return (bits >> n & 1) != 0 ? 1 : -1; };
      EXPECT_LE(std::abs(launch(fir, sign(0), sign(1), sign(2))), 1.0 + kEps);
    }
  }
  const Eigen::Vector3d taps(-0.1, 0.7, -0.2);
  EXPECT_NEAR(launch(taps, -1, 1, 1), 0.8, 2 * kEps);
  EXPECT_NEAR(launch(taps, 1, 1, 1), 0.4, 2 * kEps);
  EXPECT_NEAR(launch(taps, 1, 1, -1), 0.6, 2 * kEps);
}

}  // namespace
}  // namespace tapwright

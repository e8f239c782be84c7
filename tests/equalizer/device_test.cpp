#include "tapwright/equalizer/device.hpp"

#include <gtest/gtest.h>

#include <stdexcept>

#include "tapwright/base/fft.hpp"

namespace tapwright {
namespace {

ReceivedSpectrum spectrum_of(const Eigen::VectorXd& samples, int per_ui) {
  ReceivedSpectrum s;
  s.values = real_spectrum(samples);
  s.num_samples = samples.size();
  s.samples_per_ui = per_ui;
  s.ui_s = 1e-9;
  return s;
}

TEST(Dfe, SettlesAtTheNearestCodeAndTheSmallerOfTwo) {
  const DfeTap real{1, 0.05, false, {}};
  EXPECT_EQ(settled_v(real, 0.2, 1.0), 0.05);
  EXPECT_EQ(settled_v(real, -0.2, 1.0), -0.05);
  EXPECT_EQ(settled_v(real, 0.01, 1.0), 0.01);
  const DfeTap stepped{1, 0.05, false, {{-2, -0.04}, {-1, -0.02}, {0, 0.0}, {1, 0.02}, {2, 0.04}}};
  EXPECT_EQ(settled_v(stepped, 0.029, 1.0), 0.02);
  EXPECT_EQ(settled_v(stepped, -0.031, 1.0), -0.04);
  EXPECT_EQ(settled_v(stepped, 0.5, 1.0), 0.04);
  EXPECT_EQ(settled_v(stepped, 0.01, 1.0), 0.0);
  EXPECT_EQ(limit_v(stepped, 1.0), 0.04);
  const DfeTap relative{1, 0.5, true, {}};
  EXPECT_EQ(settled_v(relative, 0.3, 0.2), 0.1);
  EXPECT_EQ(limit_v(relative, 0.2), 0.1);
}

TEST(StatePulses, FlatStateWithoutFilterGivesTheRecordBack) {
  const Eigen::VectorXd samples = Eigen::VectorXd::LinSpaced(48, -0.2, 1.0);
  Receiver receiver;
  receiver.ctle = {{0, "flat", CtleZerosPoles{}, {}}, {1, "double", CtleZerosPoles{2.0, {}, {}}, {}}};
  const auto spectrum = spectrum_of(samples, 8);
  const auto states = state_pulses(receiver, spectrum, {spectrum});
  ASSERT_EQ(states.size(), 2u);
  // Rounding of a transform of 48 samples.
  EXPECT_LT((states[0].victim.samples_v() - samples).cwiseAbs().maxCoeff(), 1e-14);
  EXPECT_LT((states[1].aggressors[0].samples_v() - 2.0 * samples).cwiseAbs().maxCoeff(), 1e-14);
  EXPECT_EQ(states[0].peak_index(), 47);
  EXPECT_THROW((void)state_pulses(receiver, spectrum, {spectrum_of(samples, 4)}),
               std::invalid_argument);
}

TEST(StatePulses, CtleOnAPurePoleIsTheKnownExponential) {
  // A one-sample impulse through one pole: h(t) = (1/tau) e^(-t/tau); area dt.
  constexpr int kPerUi = 256;
  Eigen::VectorXd impulse = Eigen::VectorXd::Zero(64 * kPerUi);
  impulse[0] = 1.0;
  Receiver receiver;
  const double pole_hz = 0.3e9;  // tau = 0.53 ns
  receiver.ctle = {{0, "", CtleZerosPoles{1.0, {}, {pole_hz}}, {}}};
  const auto state = state_pulses(receiver, spectrum_of(impulse, kPerUi), {}).front();
  const double tau_s = 1.0 / (2 * std::numbers::pi * pole_hz);
  for (int i : {300, 600, 1200}) {
    const double t_s = i * state.victim.dt_s();
    // Method: the record is band-limited, which rings at half a sample over the distance, ~1/i.
    EXPECT_NEAR(state.victim.samples_v()[i],
                state.victim.dt_s() / tau_s * std::exp(-t_s / tau_s), 2e-5) << i;
  }
}

TEST(PeakInput, IsTheWorstPatternAtTheWorstPhase) {
  const FirLimits limits{{{0, 0, 1, {}, false}, {1, -0.5, 0, {}, false}}, 1.0, {}};
  // Phase 0: 1, 0.5; phase 1: 0.2, -0.9 -> FIR (0.8, -0.2): phase 0 sums 0.8+0.2+0.1, phase 1
  // 0.16 + 0.76 + 0.18.
  const PulseResponse input(Eigen::Vector4d(1.0, 0.2, 0.5, -0.9), 2, 1e-9);
  EXPECT_NEAR(peak_input_v(limits, Eigen::Vector2d(0.8, -0.2), input),
              std::max(0.8 + std::abs(0.4 - 0.2) + 0.1, 0.16 + std::abs(-0.72 - 0.04) + 0.18),
              1e-15);
}

}  // namespace
}  // namespace tapwright

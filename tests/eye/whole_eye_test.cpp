#include "tapwright/eye/whole_eye.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <random>

#include "support/sample_link.hpp"
#include "tapwright/base/normal.hpp"
#include "tapwright/eye/distribution.hpp"
#include "tapwright/eye/score.hpp"

namespace tapwright {
namespace {

/// A smooth pulse with a ripple, 16 samples per UI.
Link rippled_link(double noise_v) {
  constexpr int kPerUi = 16;
  std::mt19937_64 random(50);
  std::uniform_real_distribution<double> uniform(-1.0, 1.0);
  Eigen::VectorXd p(60 * kPerUi);
  for (Eigen::Index i = 0; i < p.size(); ++i) {
    const double t = static_cast<double>(i) / kPerUi - 5.0;
    p[i] = std::exp(-1.6 * t * t) + (t > -3.0 ? 0.02 * uniform(random) * std::exp(-t / 15.0) : 0.0);
  }
  Link link = test::link_of_pulse(p, kPerUi);
  link.device.transmitter.swings = {{0, 0.3}};
  link.device.receiver.noise_rms_v = noise_v;
  return link;
}

// Independent: the grid convolution, phase by phase.
TEST(WholeEye, AgreesWithTheGridAtEveryPhaseAndLevel) {
  for (const int levels : {2, 4}) {
    Link link = rippled_link(2e-3);
    link.signal.levels = levels;
    const EyeModel model = prepare(link);
    const Settings settings = test::plain_settings(link);
    const WholeEye whole = whole_eye(model, settings, {512, {}});
    ASSERT_EQ(whole.one_sided.cols(), 16);
    for (Eigen::Index phase = 0; phase < 16; phase += 3) {
      Settings there = settings;
      there.phase_samples = phase - whole.sampling_index;
      const Score s = score(model, there);
      Disturbance d;
      d.levels = levels;
      d.sigma_v = 2e-3;
      d.symbols_v = s.residual_v.values;
      d.symbols_v[s.residual_v.main_index] = 0.0;
      const double step_v = 20e-6;
      const GridDistribution grid = grid_distribution(d, step_v);
      double mass = 0.0;
      for (Eigen::Index level = 0; level < 512; ++level) {
        const double v = whole.levels_v[level];
        const double expected = grid.exceedance(s.signal_v - v);
        mass += whole.density(level, phase);
        if (expected < 1e-18) continue;
        // Method: interpolation over steps well under sigma 1e-3; the grid reads levels up to two
        // of its steps too far out, a relative change of theta 2 step with theta <= Q(1e-18)/sigma.
        EXPECT_NEAR(whole.one_sided(level, phase) / expected, 1.0, 1e-3 + 8.8 / 2e-3 * 2.0 * step_v)
            << "level " << v << " phase " << phase;
      }
      EXPECT_NEAR(mass, 1.0, 1e-3) << "the range holds every level";
    }
  }
}

TEST(WholeEye, ContoursAreTheEyeHeights) {
  Link link = rippled_link(2e-3);
  link.jitter.random_ui = 0.01;
  link.jitter.dual_dirac_peak_ui = 0.03;
  for (const double probability : {1e-4, 1e-12, 1e-17}) {
    link.target.error_ratio = probability;
    const EyeModel model = prepare(link);
    const Settings settings = test::plain_settings(link);
    const WholeEye whole = whole_eye(model, settings);
    const Eigen::VectorXd contour_v = whole.contour_v(probability);
    int num_compared = 0;
    for (Eigen::Index phase = 0; phase < 16; ++phase) {
      Settings there = settings;
      there.phase_samples = phase - whole.sampling_index;
      const double half_v = 0.5 * *score(model, there).height.at_error_ratio_v;
      if (std::isnan(contour_v[phase])) continue;
      ++num_compared;
      // Method: between levels b apart ln P is taken as linear; its curvature is at most 1/sigma^2
      // and its slope theta at least 1/sigma here: b^2 / (8 sigma).
      const double bin_v = whole.levels_v[1] - whole.levels_v[0];
      EXPECT_NEAR(contour_v[phase], half_v, bin_v * bin_v / (8.0 * 2e-3)) << phase;
    }
    EXPECT_GT(num_compared, 8);
  }
}

// Derived: nothing but noise, one symbol alone in its UI.
TEST(WholeEye, BathtubsOfNoiseAreGaussianTails) {
  constexpr int kPerUi = 8;
  Link link = test::link_of_pulse(Eigen::VectorXd::Constant(kPerUi, 0.1), kPerUi);
  link.device.receiver.noise_rms_v = 0.02;
  Settings settings = test::plain_settings(link);
  settings.phase_samples = kPerUi / 2;
  const WholeEye whole = whole_eye(prepare(link), settings, {1023, 0.3});
  const Eigen::VectorXd over_phase = whole.bathtub_over_phase();
  for (const double p : over_phase) EXPECT_NEAR(p / gaussian_tail(5.0), 1.0, 1e-3);
  const Eigen::VectorXd over_level = whole.bathtub_over_level();
  for (Eigen::Index i = 0; i < over_level.size(); ++i) {
    const double v = whole.levels_v[i];
    const double expected =
        0.5 * (gaussian_tail((0.1 - v) / 0.02) + gaussian_tail((0.1 + v) / 0.02));
    EXPECT_NEAR(over_level[i] / expected, 1.0, 1e-3);
  }
}

TEST(WholeEye, HoldsWithoutNoise) {
  Link link = rippled_link(0.0);
  const EyeModel model = prepare(link);
  const Settings settings = test::plain_settings(link);
  const WholeEye whole = whole_eye(model, settings, {512, {}});
  EXPECT_TRUE(whole.error_ratio.allFinite());
  EXPECT_GE(whole.error_ratio.minCoeff(), 0.0);
  EXPECT_NEAR(whole.density.col(whole.sampling_index).sum(), 1.0, 0.02);
  const Score s = score(model, settings);
  for (Eigen::Index i = 0; i < whole.levels_v.size(); ++i) {
    if (std::abs(whole.levels_v[i]) < 0.5 * s.height.worst_case_v - 1e-3) {
      EXPECT_LT(whole.error_ratio(i, whole.sampling_index), 1e-18) << "inside the worst case";
    }
  }
}

// Derived: a clock that moves sees the mean over phase of what stands still.
TEST(WholeEye, AveragesOverClockJitter) {
  Link link = rippled_link(2e-3);
  const Settings settings = test::plain_settings(link);
  const WholeEye still = whole_eye(prepare(link), settings, {256, 0.4});
  link.jitter.common_random_ui = 0.02;
  const EyeModel model = prepare(link);
  const WholeEye moving = whole_eye(model, settings, {256, 0.4});
  ASSERT_EQ(moving.one_sided.cols(), still.one_sided.cols());
  const double sigma = 0.02 * 16;  // samples
  const auto share = [&](double i) {
    return gaussian_tail((i - 0.5) / sigma) - gaussian_tail((i + 0.5) / sigma);
  };
  for (Eigen::Index level = 0; level < 256; level += 17) {
    double mean = 0.0;
    for (Eigen::Index i = -3; i <= 3; ++i) {
      mean += share(static_cast<double>(i)) * still.one_sided(level, still.sampling_index + i);
    }
    EXPECT_NEAR(moving.one_sided(level, moving.sampling_index), mean, 1e-9 + 1e-6 * mean);
  }
}

TEST(WholeEye, RefusesAGridOfNothing) {
  const Link link = rippled_link(1e-3);
  const EyeModel model = prepare(link);
  EXPECT_THROW((void)whole_eye(model, test::plain_settings(link), {1, {}}), std::invalid_argument);
  EXPECT_THROW((void)whole_eye(model, test::plain_settings(link), {64, 0.0}),
               std::invalid_argument);
}

}  // namespace
}  // namespace tapwright

#include "tapwright/eye/whole_eye.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <utility>

#include "support/sample_link.hpp"
#include "tapwright/base/normal.hpp"
#include "tapwright/eye/distribution.hpp"
#include "tapwright/eye/score.hpp"

namespace tapwright {
namespace {

/// A smooth pulse with a ripple, 16 samples per UI.
Link rippled_link(double noise_v) {
  constexpr int kPerUi = 16;
  // Ripples of 1 to 3 UI: smooth between samples.
  const std::pair<double, double> ripples[] = {{2.3, 0.4}, {3.8, 2.0}, {6.0, 4.1}};
  Eigen::VectorXd p(60 * kPerUi);
  for (Eigen::Index i = 0; i < p.size(); ++i) {
    const double t = static_cast<double>(i) / kPerUi - 5.0;
    p[i] = std::exp(-1.6 * t * t);
    for (const auto& [radians_per_ui, phase] : ripples) {
      if (t <= 0.0) continue;
      p[i] += 0.01 * std::exp(-t / 15.0) * t / (1.0 + t) * std::sin(radians_per_ui * t + phase);
    }
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
      // Method: a density of ripples about as wide as sigma summed at points a sigma apart.
      EXPECT_NEAR(mass, 1.0, 3e-3) << "the range holds every level";
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
  // Documented: noise of 0.8 % of the deviation is put in, of which 9 sigma reach 1e-18.
  Eigen::VectorXd r = s.residual_v.values;
  r[s.residual_v.main_index] = 0.0;
  const double margin_v = 9.0 * 0.008 * r.norm();
  ASSERT_LT(margin_v, 0.1 * s.height.worst_case_v);
  for (Eigen::Index i = 0; i < whole.levels_v.size(); ++i) {
    if (std::abs(whole.levels_v[i]) < 0.5 * s.height.worst_case_v - margin_v) {
      EXPECT_LT(whole.error_ratio(i, whole.sampling_index), 1e-18) << "inside the worst case";
    }
  }
}

// Two ways to the same height: here all thresholds are averaged over the phases, there the level is
// looked for; with and without a line code.
TEST(WholeEye, AgreesWithTheScoreUnderClockJitterAndCode) {
  for (const auto code : {LineCodeKind::kNone, LineCodeKind::k8b10b}) {
    for (const double clock_ui : {0.0, 0.04}) {
      Link link = rippled_link(3e-3);
      link.signal.span_ui = {4, 12};
      link.signal.line_code.kind = code;
      link.jitter.common_random_ui = clock_ui;
      const EyeModel model = prepare(link);
      const Settings settings = test::plain_settings(link);
      const WholeEye whole = whole_eye(model, settings);
      ASSERT_EQ(whole.one_sided.cols(), 16);
      const Score s = score(model, settings);
      // Method: ln P linear over a bin b, b^2 / (8 sigma); with a code, quantiles linear over two
      // decades, whose bend a hundredth of sigma covers; with clock jitter, two sums over phases
      // not the same on a slope that bends at every sample, a thousandth; with both what is
      // documented.
      const double bin_v = whole.levels_v[1] - whole.levels_v[0];
      const double height_v = 0.5 * *s.height.at_error_ratio_v;
      const double share = code == LineCodeKind::kNone ? 1e-3 : 5e-3;
      EXPECT_NEAR(whole.contour_v(1e-12)[whole.sampling_index], height_v,
                  bin_v * bin_v / (8.0 * 3e-3) + 1e-6 +
                      (code == LineCodeKind::kNone ? 0.0 : 0.01 * 3e-3) +
                      (clock_ui > 0.0 ? share * height_v : 0.0));
      EXPECT_NEAR(whole.density.col(whole.sampling_index).sum(), 1.0, 1e-3);
    }
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

#include "tapwright/eye/sampling.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <random>

#include "support/sample_link.hpp"
#include "tapwright/eye/score.hpp"

namespace tapwright {
namespace {

using test::fir_tap;
using test::link_of_pulse;
using test::plain_settings;

/// Rises over `rise` UI from 1 UI on, falls over `fall` UI.
Link triangle_link(double rise, double fall, int per_ui = 60) {
  Eigen::VectorXd p(8 * per_ui);
  for (Eigen::Index i = 0; i < p.size(); ++i) {
    const double t = static_cast<double>(i) / per_ui - 1.0 - rise;
    p[i] = std::max(0.0, t < 0.0 ? 1.0 + t / rise : 1.0 - t / fall);
  }
  return link_of_pulse(p, per_ui);
}

TEST(SettledDfe, GoesToTheNearestValueItCanTake) {
  Link link = link_of_pulse(Eigen::Vector4d(1.0, 0.3, -0.07, 0.04), 1);
  const std::vector<Code> codes = {{-1, -0.05}, {0, 0.0}, {1, 0.05}};
  link.device.receiver.dfe = {{1, 0.1, false, {}}, {2, 0.05, false, codes}, {3, 0.1, true, {}}};
  link.device.transmitter.swings = {{0, 0.5}};
  const Eigen::VectorXd dfe_v = settled_dfe(prepare(link), plain_settings(link));
  ASSERT_EQ(dfe_v.size(), 3);
  EXPECT_NEAR(dfe_v[0], 0.1, 1e-15) << "clipped";
  EXPECT_NEAR(dfe_v[1], -0.05, 1e-15) << "-0.035 V lies nearer to -0.05 V than to 0";
  EXPECT_NEAR(dfe_v[2], 0.02, 1e-13) << "within a tenth of the main cursor";
}

// Derived: t_s = peak + tau has pre-cursor tau and post-cursor 1/2 - tau/2, equal at tau = 1/3.
TEST(SamplingInstant, MuellerMullerBalancesTheNeighbours) {
  Link link = triangle_link(1.0, 2.0);
  const EyeModel model = prepare(link);
  const SamplingInstant at =
      sampling_instant(model, plain_settings(link), SamplingRule::kMuellerMuller);
  EXPECT_TRUE(at.rule_held);
  EXPECT_EQ(at.phase_samples, 20);
}

// Derived: rise 2, fall 2, sampled at peak + tau: pre 1/2 + tau/2, post 1/2 - tau/2, balanced at
// the peak; a DFE that takes 1/4 off moves it to pre = post - 1/4, tau = -1/4.
TEST(SamplingInstant, MuellerMullerSeesTheFirstDfeTap) {
  Link link = triangle_link(2.0, 2.0);
  EXPECT_EQ(sampling_instant(prepare(link), plain_settings(link), SamplingRule::kMuellerMuller)
                .phase_samples,
            0);
  link.device.receiver.dfe = {{1, 0.25, false, {}}};
  EXPECT_EQ(sampling_instant(prepare(link), plain_settings(link), SamplingRule::kMuellerMuller)
                .phase_samples,
            -15);
  // With the whole post-cursor taken off, the pre-cursor has to vanish: one UI after the start.
  link.device.receiver.dfe = {{1, 2.0, false, {}}};
  EXPECT_EQ(sampling_instant(prepare(link), plain_settings(link), SamplingRule::kMuellerMuller)
                .phase_samples,
            -60);
}

TEST(SamplingInstant, FallsBackToTheBestPhaseWhereTheRuleHasNoSolution) {
  // One sample alone: the balance is zero but never crosses; one sample per UI has no edges.
  Link link = link_of_pulse(Eigen::Vector3d(0.2, 1.0, 0.1), 1);
  const SamplingInstant at =
      sampling_instant(prepare(link), plain_settings(link), SamplingRule::kEdge);
  EXPECT_FALSE(at.rule_held);
  EXPECT_EQ(at.phase_samples, 0);
}

// Derived: with a triangle two UI wide the wave runs straight from symbol to symbol, so it crosses
// zero half way and the middle between crossings is the peak.
TEST(SamplingInstant, EdgeSamplesHalfAUiAfterTheCrossings) {
  const Link link = triangle_link(1.0, 1.0);
  const SamplingInstant at =
      sampling_instant(prepare(link), plain_settings(link), SamplingRule::kEdge);
  EXPECT_TRUE(at.rule_held);
  EXPECT_EQ(at.phase_samples, 0);
  // Rise and fall apart by 2 tau: crossings move with the slower side. Rise 1, fall 1, delayed by a
  // FIR tap: the equalised peak counts.
  Link delayed = triangle_link(1.0, 1.0);
  delayed.device.transmitter.fir.taps = {fir_tap(0, 0.0, 1.0), fir_tap(1, -1.0, 1.0)};
  Settings settings = plain_settings(delayed);
  settings.fir = Eigen::Vector2d(0.0, 1.0);
  EXPECT_EQ(sampling_instant(prepare(delayed), settings, SamplingRule::kEdge).phase_samples, 60);
}

TEST(SamplingInstant, BestIsTheLargestOfAllCandidates) {
  for (const ObjectiveKind objective : {ObjectiveKind::kWorstCase, ObjectiveKind::kAtErrorRatio}) {
    Link link = triangle_link(1.3, 2.2, 8);
    link.objective = objective;
    link.device.receiver.noise_rms_v = 0.01;
    link.device.receiver.dfe = {{1, 0.1, false, {}}};
    const EyeModel model = prepare(link);
    Settings settings = plain_settings(link);
    const SamplingInstant at = sampling_instant(model, settings, SamplingRule::kBest);
    double best_v = -1e9;
    Eigen::Index best = 0;
    for (const Eigen::Index phase : candidate_phases(model)) {
      settings.phase_samples = phase;
      settings.dfe_v = settled_dfe(model, settings);
      const double height_v = objective_height_v(model, settings);
      if (height_v > best_v) {
        best_v = height_v;
        best = phase;
      }
    }
    EXPECT_EQ(at.phase_samples, best);
  }
}

TEST(BestDfe, IsTheSettledOneForIndependentSymbolsAtOnePhase) {
  Link link = link_of_pulse(Eigen::Vector4d(1.0, 0.3, -0.07, 0.04), 1);
  link.device.receiver.dfe = {{1, 0.1, false, {}}, {2, 0.1, false, {}}};
  const EyeModel model = prepare(link);
  EXPECT_EQ(best_dfe(model, plain_settings(link)), settled_dfe(model, plain_settings(link)));
}

// A mask sees other cursors than the sampling instant. Derived, rise 1, fall 3, mask +-m: with the
// tap at 2/3 + a, half the eye is 2/3 - 5m/3 - |m/3 - a| at the early edge and 2/3 - m - |m/3 + a|
// at the late one: 2/3 - 2m settled (a = 0), at best 2/3 - 5m/3 (a = m/3).
TEST(BestDfe, DoesBetterThanTheSettledOneUnderAMask) {
  for (const bool with_codes : {false, true}) {
    Link link = triangle_link(1.0, 3.0, 24);
    link.mask_width_ui = 0.25;
    DfeTap tap{1, 1.0, false, {}};
    if (with_codes) {
      for (int code = -48; code <= 48; ++code) tap.codes.push_back({code, code / 48.0});
    }
    link.device.receiver.dfe = {tap};
    const EyeModel model = prepare(link);
    Settings settings = plain_settings(link);
    settings.dfe_v = settled_dfe(model, settings);
    EXPECT_NEAR(settings.dfe_v[0], 2.0 / 3.0, 1e-12);
    EXPECT_NEAR(objective_height_v(model, settings), 2.0 * (2.0 / 3.0 - 0.25), 1e-12);
    settings.dfe_v = best_dfe(model, settings);
    const double best_v = 2.0 * (2.0 / 3.0 - 5.0 / 3.0 * 0.125);
    if (with_codes) {
      EXPECT_NEAR(settings.dfe_v[0], 34.0 / 48.0, 1e-12) << "m/3 is two codes";
      EXPECT_NEAR(objective_height_v(model, settings), best_v, 1e-12);
    } else {
      // Method: steps shrink to a thousandth of the limit.
      EXPECT_NEAR(objective_height_v(model, settings), best_v, 2e-3);
    }
  }
}

}  // namespace
}  // namespace tapwright

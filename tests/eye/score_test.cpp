#include "tapwright/eye/score.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <limits>
#include <random>

#include "support/sample_link.hpp"
#include "tapwright/base/normal.hpp"

namespace tapwright {
namespace {

using test::fir_tap;
using test::link_of_pulse;
using test::plain_settings;

// Cursors near 1 V go through one transform and back: rounding of a few eps times the record.
constexpr double kRounding = 1e-13;

Eigen::VectorXd cursors(std::initializer_list<double> values) {
  Eigen::VectorXd v(static_cast<Eigen::Index>(values.size()));
  std::copy(values.begin(), values.end(), v.begin());
  return v;
}

Eigen::VectorXd random_pulse(std::mt19937_64& random, Eigen::Index size, Eigen::Index main) {
  std::uniform_real_distribution<double> uniform(-1.0, 1.0);
  Eigen::VectorXd v(size);
  for (double& x : v) x = 0.1 * uniform(random);
  v[main] = 1.0;
  return v;
}

TEST(Score, AddsUpTheCursorsOfAHandCase) {
  const Link link = link_of_pulse(cursors({0.1, 1.0, 0.3, -0.2}), 1);
  const Score s = score(prepare(link), plain_settings(link));
  EXPECT_NEAR(s.main_cursor_v, 1.0, kRounding);
  EXPECT_NEAR(s.isi_v, 0.6, kRounding);
  EXPECT_NEAR(s.height.worst_case_v, 0.8, kRounding);
  EXPECT_FALSE(s.eye_width_ui.has_value()) << "one sample per UI has no width";
}

TEST(Score, FiltersWithTheFirAndTakesTheDfeOff) {
  Link link = link_of_pulse(cursors({0.1, 1.0, 0.3, -0.2}), 1);
  link.device.transmitter.swings = {{0, 0.5}};
  link.device.transmitter.fir.taps = {fir_tap(0, 0.0, 1.0), fir_tap(1, -0.5, 0.0)};
  link.device.receiver.dfe = {{1, 0.05, false, {}}, {3, 0.1, false, {}}};
  Settings settings = plain_settings(link);
  settings.fir = cursors({0.8, -0.2});
  settings.dfe_v = cursors({0.02, 0.01});
  // q = 0.5 (0.08, 0.78, 0.04, -0.22, 0.04), main 0.39; DFE off cursors 1 and 3.
  const Score s = score(prepare(link), settings);
  EXPECT_NEAR(s.main_cursor_v, 0.39, kRounding);
  EXPECT_NEAR(s.isi_v, 0.04 + 0.0 + 0.11 + 0.01, kRounding);
  // Adaptation goes to the cursors themselves, 0.02 V on both.
  EXPECT_NEAR(s.settled_dfe_v[0], 0.02, kRounding);
  EXPECT_NEAR(s.settled_dfe_v[1], 0.02, kRounding);
  EXPECT_NEAR(s.settled.worst_case_v, 2.0 * (0.39 - 0.15), kRounding);
}

// checks.md row 4b, derived: p(kT + T) = (1 - e^-x) e^-kx sampled at the end of the symbol.
TEST(Score, MatchesTheClosedFormOfAOnePoleChannel) {
  for (const double x : {0.5, 1.0, 2.0, 5.0}) {
    const int per_ui = 16;
    const int num_ui = 90;  // e^(-90 x) is below the last digit
    Eigen::VectorXd p(per_ui * num_ui);
    for (Eigen::Index i = 0; i < p.size(); ++i) {
      const double t = static_cast<double>(i) / per_ui;
      p[i] = t <= 1.0 ? 1.0 - std::exp(-x * t) : (1.0 - std::exp(-x)) * std::exp(-x * (t - 1.0));
    }
    Link link = link_of_pulse(p, per_ui);
    link.device.transmitter.swings = {{0, 0.4}};
    link.device.transmitter.fir.taps = {fir_tap(0, 0.0, 1.0), fir_tap(1, -0.5, 0.0)};
    const EyeModel model = prepare(link);
    Settings settings = plain_settings(link);
    const double rounding = 1e-12;
    EXPECT_NEAR(score(model, settings).height.worst_case_v, 2.0 * 0.4 * (1.0 - 2.0 * std::exp(-x)),
                rounding);
    settings.fir = cursors({1.0, -std::exp(-x)}) / (1.0 + std::exp(-x));
    EXPECT_NEAR(score(model, settings).height.worst_case_v, 2.0 * 0.4 * std::tanh(x / 2.0),
                rounding);
  }
}

// checks.md row 18, arithmetic: the inner eye of four levels is a third of that of two when nothing
// disturbs it, and never more than that when something does.
TEST(Score, GivesFourLevelsAThirdOfTheEye) {
  std::mt19937_64 random(18);
  for (int trial = 0; trial < 20; ++trial) {
    Link link = link_of_pulse(trial == 0 ? cursors({1.0}) : random_pulse(random, 4, 1), 1);
    const Settings settings = plain_settings(link);
    const double two_v = score(prepare(link), settings).height.worst_case_v;
    link.signal.levels = 4;
    const double four_v = score(prepare(link), settings).height.worst_case_v;
    if (trial == 0) {
      EXPECT_NEAR(20.0 * std::log10(four_v / two_v), -9.54, 5e-3) << "to the last printed digit";
    } else {
      EXPECT_LE(four_v, two_v / 3.0 + kRounding);
    }
  }
}

TEST(Score, ShrinksTheInnerEyeByTheLevelMismatch) {
  Link link = link_of_pulse(cursors({1.0, 0.05}), 1);
  link.signal.levels = 4;
  link.signal.level_mismatch = 0.9;
  EXPECT_NEAR(score(prepare(link), plain_settings(link)).height.worst_case_v,
              2.0 * (0.9 / 3.0 - 0.05), kRounding);
}

// Independent: every sequence of signs tried.
TEST(Score, EqualsTheWorstOfAllSequences) {
  std::mt19937_64 random(4);
  for (int trial = 0; trial < 30; ++trial) {
    const Eigen::VectorXd p = random_pulse(random, 9, 3);
    const Link link = link_of_pulse(p, 1);
    double least_v = std::numeric_limits<double>::infinity();
    for (unsigned bits = 0; bits < 256; ++bits) {
      double v = p[3];
      unsigned rest = bits;
      for (Eigen::Index k = 0; k < 9; ++k) {
        if (k == 3) continue;
        v += (rest & 1u) != 0 ? p[k] : -p[k];
        rest >>= 1;
      }
      least_v = std::min(least_v, v);
    }
    EXPECT_NEAR(score(prepare(link), plain_settings(link)).height.worst_case_v, 2.0 * least_v,
                10 * kRounding);
  }
}

Link triangle_link(int per_ui) {
  // Rises over one UI, falls over two: slope known everywhere.
  Eigen::VectorXd p(5 * per_ui);
  for (Eigen::Index i = 0; i < p.size(); ++i) {
    const double t = static_cast<double>(i) / per_ui - 1.0;
    p[i] = t <= 0.0 ? 0.0 : t <= 1.0 ? t : t <= 3.0 ? 1.0 - 0.5 * (t - 1.0) : 0.0;
  }
  return link_of_pulse(p, per_ui);
}

TEST(Score, TurnsJitterIntoVoltsBySlope) {
  Link link = triangle_link(32);
  link.jitter.random_ui = 0.01;
  link.jitter.dual_dirac_peak_ui = 0.05;
  link.target.error_ratio = 1e-12;
  Settings settings = plain_settings(link);
  settings.phase_samples =
      -16;  // half a UI before the peak: q = 0.5, 0.75, 0.25; slope 1, -1/2, -1/2
  const Score s = score(prepare(link), settings);
  EXPECT_NEAR(s.main_cursor_v, 0.5, kRounding);
  EXPECT_NEAR(s.dual_dirac_v, 0.05 * 2.0, kRounding);
  EXPECT_NEAR(s.sigma_jitter_v, 0.01 * std::sqrt(1.5), kRounding);
  EXPECT_NEAR(s.height.worst_case_v,
              2.0 * (0.5 - 1.0 - 0.1 - gaussian_quantile_of_tail(1e-12) * 0.01 * std::sqrt(1.5)),
              10 * kRounding);
}

// Derived: a lone cursor on a slope of s V/UI under clock jitter of sigma_c UI is as good as one
// with noise of sqrt(sigma^2 + s^2 sigma_c^2); in the worst case it is the least within Q sigma_c.
TEST(Score, AveragesOverClockJitter) {
  constexpr int kPerUi = 32;
  Eigen::VectorXd p(3 * kPerUi);
  p.setZero();
  for (Eigen::Index i = 0; i < kPerUi; ++i) p[kPerUi + i] = static_cast<double>(i) / kPerUi;
  for (const double clock_ui : {0.002, 0.02}) {
    Link link = link_of_pulse(p, kPerUi);
    link.device.receiver.noise_rms_v = 0.01;
    link.jitter.common_random_ui = clock_ui;
    Settings settings = plain_settings(link);
    settings.phase_samples =
        -kPerUi / 2 + 1;  // the middle of the ramp; its peak is one sample short
    const Score s = score(prepare(link), settings);
    EXPECT_NEAR(s.main_cursor_v, 0.5, kRounding);
    const double quantile = gaussian_quantile_of_tail(1e-12);
    // Method: the sums over phase and line are good to 1e-6 of P, a few 1e-8 of N.
    EXPECT_NEAR(*s.height.at_error_ratio_v, 2.0 * (0.5 - quantile * std::hypot(0.01, clock_ui)),
                1e-6);
    // The grid of samples is looked at: 1/32 UI steps within Q sigma_c.
    const double reach_ui = std::floor(quantile * clock_ui * kPerUi) / kPerUi;
    EXPECT_NEAR(s.height.worst_case_v, 2.0 * (0.5 - reach_ui - quantile * 0.01), 1e-12);
  }
}

TEST(Score, AddsReceiverAndTransmitterNoiseAndSensitivity) {
  Link link = link_of_pulse(cursors({0.5}), 1);
  link.device.receiver.noise_rms_v = 0.003;
  link.device.receiver.sensitivity_v = 0.01;
  link.device.transmitter.snr_db = 40.0;
  const Score s = score(prepare(link), plain_settings(link));
  EXPECT_NEAR(s.sigma_receiver_v, 0.003, 1e-15);
  EXPECT_NEAR(s.sigma_transmitter_v, 0.005, kRounding);
  const double sigma_v = std::hypot(0.003, 0.005);
  const double height_v = 2.0 * (0.5 - gaussian_quantile_of_tail(1e-12) * sigma_v - 0.01);
  EXPECT_NEAR(s.height.worst_case_v, height_v, kRounding);
  // Noise alone: both readings are the same. Method: 1e-6 of N.
  EXPECT_NEAR(*s.height.at_error_ratio_v, height_v, 2e-6 * 0.05);
}

TEST(Score, TakesTheLeastUnderTheMask) {
  Link link = triangle_link(32);
  link.mask_width_ui = 0.5;
  const EyeModel model = prepare(link);
  const Score s = score(model, plain_settings(link));
  link.mask_width_ui = 0.0;
  const EyeModel bare = prepare(link);
  double least_v = std::numeric_limits<double>::infinity();
  for (Eigen::Index phase = -8; phase <= 8; ++phase) {
    Settings settings = plain_settings(link);
    settings.phase_samples = phase;
    least_v = std::min(least_v, score(bare, settings).height.worst_case_v);
  }
  EXPECT_NEAR(s.height.worst_case_v, least_v, kRounding);
}

// Derived: E(t) = 2 (1 - 2 (1/2)) ... for t_s + tau, tau in UI, q_0 - |q_-1| - |q_1| of the
// triangle.
TEST(Score, FindsTheWidthOfATriangle) {
  const Link link = triangle_link(64);
  const Score s = score(prepare(link), plain_settings(link));
  // After the peak by tau: q = (tau before), 1 - tau/2, 1/2 - tau/2: open while
  // 1 - tau/2 - 1/2 + tau/2 - tau > 0, tau < 1/2. Before the peak by tau: q = 1 - tau,
  // post 1/2 + tau/2 and tau/2: 1 - tau - 1/2 - tau > 0, tau < 1/4.
  ASSERT_TRUE(s.eye_width_worst_case_ui.has_value());
  EXPECT_NEAR(*s.eye_width_worst_case_ui, 0.75, 1e-9);
  EXPECT_NEAR(s.height.worst_case_v, 1.0, kRounding);
  // Three bits without noise: at 1e-12 the worst sequence counts all the same. The grid that
  // serves without noise places levels within one step of 10 uV or 1/65536 of the range.
  EXPECT_NEAR(*s.eye_width_ui, 0.75, 2e-4);
}

TEST(Score, CountsAnAggressorAtItsWorstPhase) {
  Link link = triangle_link(32);
  Aggressor neighbour;
  neighbour.name = "neighbour";
  Eigen::VectorXd x = Eigen::VectorXd::Zero(5 * 32);
  x[32 + 5] = 0.02;
  x[64 + 5] = -0.01;
  x[64 + 9] = 0.025;
  neighbour.spectrum = test::spectrum_of(x, 32, link.signal.ui_s());
  link.crosstalk = {neighbour};
  link.device.transmitter.swings = {{0, 0.5}};
  const Score s = score(prepare(link), plain_settings(link));
  EXPECT_NEAR(s.crosstalk_v, 0.5 * 0.03, kRounding);
  link.crosstalk[0].amplitude_v = 1.0;
  EXPECT_NEAR(score(prepare(link), plain_settings(link)).crosstalk_v, 0.03, kRounding);
}

TEST(Score, NeverPutsTheErrorRatioBelowTheWorstCase) {
  std::mt19937_64 random(6);
  for (int trial = 0; trial < 30; ++trial) {
    Link link = link_of_pulse(random_pulse(random, 40, 5), 1);
    link.signal.levels = trial % 2 == 0 ? 2 : 4;
    link.device.receiver.noise_rms_v = trial % 3 == 0 ? 1e-4 : 5e-3;
    link.target.error_ratio = trial % 5 == 0 ? 1e-4 : 1e-15;
    const Score s = score(prepare(link), plain_settings(link));
    EXPECT_GE(*s.height.at_error_ratio_v, s.height.worst_case_v - 2e-6);
  }
}

TEST(Score, SaysWhatMissesTheTarget) {
  Link link = triangle_link(32);
  link.target.eye_height_v = 1.2;
  link.target.eye_width_ui = 0.8;
  link.device.receiver.peak_input_v = 1.0;
  const Score s = score(prepare(link), plain_settings(link));
  EXPECT_FALSE(s.target_met());
  ASSERT_EQ(s.missed.size(), 3u);
  EXPECT_EQ(s.missed[0], "eye height 1000.0 mV in the worst case, wanted 1200.0 mV");
  EXPECT_EQ(s.missed[1], "eye width 0.750 UI in the worst case, wanted 0.800 UI");
  EXPECT_EQ(s.missed[2], "receiver input 3000.0 mVppd, allowed 2000.0 mVppd");
}

TEST(Score, RefusesSettingsThatDoNotFit) {
  const Link link = link_of_pulse(cursors({1.0, 0.1}), 1);
  const EyeModel model = prepare(link);
  Settings settings = plain_settings(link);
  settings.fir = Eigen::VectorXd::Ones(2);
  try {
    (void)score(model, settings);
    FAIL();
  } catch (const std::invalid_argument& error) {
    EXPECT_STREQ(error.what(), "settings: found number of FIR taps 2, wanted 1");
  }
  settings = plain_settings(link);
  settings.ctle_index = 3;
  EXPECT_THROW((void)score(model, settings), std::invalid_argument);
}

}  // namespace
}  // namespace tapwright

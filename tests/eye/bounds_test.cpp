#include "tapwright/eye/bounds.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <numbers>

#include "support/sample_link.hpp"

namespace tapwright {
namespace {

double in_db(double ratio) { return 10.0 * std::log10(ratio); }

// checks.md row 2. Source: J. M. Cioffi's course reader, chapter 3, the example channel 1 + 0.9 D
// (from memory); Salz 1973. Tolerance: the printed digits. Re-derived below in closed form.
TEST(Bounds, MatchTheReadersExampleChannel) {
  const Eigen::Vector2d p(1.0, 0.9);
  const EqualizerBounds b = discrete_bounds(p, 1.0, 0.181);
  EXPECT_NEAR(in_db(b.matched_filter), 10.0, 0.05);
  EXPECT_NEAR(in_db(b.linear), 5.68, 0.005);
  EXPECT_NEAR(in_db(b.feedback), 8.36, 0.005);
  EXPECT_NEAR(in_db(b.zero_forcing_linear), 0.21, 0.005);
  EXPECT_NEAR(in_db(b.zero_forcing_feedback), 7.42, 0.005);

  // Re-derived: 1 + S = g |1 + r e^-jw|^2 with |r| < 1, so the geometric mean is g and the mean of
  // 1/(1+S) is 1/(g (1 - r^2)); g (1 + r^2) = 1 + 1.81/0.181 and g r = 0.9/0.181.
  const double a = 1.0 + 1.81 / 0.181;
  const double c = 0.9 / 0.181;
  const double g = 0.5 * (a + std::sqrt(a * a - 4.0 * c * c));
  const double r = c / g;
  EXPECT_NEAR(b.feedback, g - 1.0, 1e-12 * g);
  EXPECT_NEAR(b.linear, g * (1.0 - r * r) - 1.0, 1e-12 * g);
  EXPECT_NEAR(b.zero_forcing_linear, (1.0 - 0.81) / 0.181, 1e-10);
  EXPECT_NEAR(b.zero_forcing_feedback, 1.0 / 0.181, 1e-10);
}

// checks.md row 2b. Source: the same reader (from memory, recomputed): tolerance half a digit. The
// reader's channel is 1 + 0.9 D^-1: 0.9 comes first. (The infinite bounds can't tell the two
// apart.)
TEST(Bounds, FiniteEqualizerMatchesTheReader) {
  const FiniteEqualizer e = finite_mmse(Eigen::Vector2d(0.9, 1.0), 2, 1, 1, 1.0, 0.181);
  ASSERT_EQ(e.forward.size(), 2);
  EXPECT_NEAR(e.forward[0], 0.1556, 5e-5);
  EXPECT_NEAR(e.forward[1], 0.7668, 5e-5);
  EXPECT_NEAR(e.mean_square_error, 0.1542, 5e-5);
  EXPECT_NEAR(in_db(e.unbiased_ratio), 7.39, 5e-3);
  EXPECT_NEAR(e.feedback[0], e.forward[1], 1e-15) << "the 1 of the later sample";
}

// checks.md row 2c. Source: J. G. Proakis, Digital Communications (from memory, recomputed).
TEST(Bounds, MatchProakisTwoTapChannel) {
  for (const double angle : {0.1, 0.5, std::numbers::pi / 4.0}) {
    for (const double n0 : {0.01, 0.1, 1.0}) {
      const double a = std::cos(angle);
      const double b = std::sin(angle);
      const EqualizerBounds bounds = discrete_bounds(Eigen::Vector2d(a, b), 1.0, n0);
      const double linear = n0 / std::sqrt(n0 * n0 + 2.0 * n0 + std::pow(a * a - b * b, 2));
      const double feedback =
          2.0 * n0 / (1.0 + n0 + std::sqrt(std::pow(1.0 + n0, 2) - std::pow(2.0 * a * b, 2)));
      // Rounding of some 1e4 terms.
      EXPECT_NEAR(1.0 / (1.0 + bounds.linear), linear, 1e-12);
      EXPECT_NEAR(1.0 / (1.0 + bounds.feedback), feedback, 1e-12);
      if (n0 == 0.1 && angle > 0.7) {
        EXPECT_NEAR(linear, 0.21822, 5e-6);
        EXPECT_NEAR(feedback, 0.12835, 5e-6);
      }
    }
  }
}

// Property: long finite equalizers come up to the infinite ones and never pass them.
TEST(Bounds, AreApproachedFromBelowByFiniteEqualizers) {
  const Eigen::Vector3d p(0.407, 0.815, 0.407);
  const EqualizerBounds bounds = discrete_bounds(p, 1.0, 0.05);
  double last = 0.0;
  for (const int taps : {2, 6, 20, 60}) {
    const double ratio = finite_mmse(p, taps, 0, taps / 2 + 1, 1.0, 0.05).unbiased_ratio;
    EXPECT_GE(ratio, last);
    EXPECT_LE(ratio, bounds.linear * (1.0 + 1e-12));
    last = ratio;
  }
  EXPECT_NEAR(last / bounds.linear, 1.0, 1e-3);
  const double feedback = finite_mmse(p, 60, 2, 59, 1.0, 0.05).unbiased_ratio;
  EXPECT_NEAR(feedback / bounds.feedback, 1.0, 1e-6);
  EXPECT_LE(feedback, bounds.feedback * (1.0 + 1e-12));
}

Link link_with_density(const Eigen::VectorXd& p, int per_ui) {
  Link link = test::link_of_pulse(p, per_ui);
  link.channel.at_slicer = false;
  link.device.receiver.bandwidth_hz = 4e9;
  link.device.receiver.noise_density_v2_per_hz = 2e-12;
  link.device.transmitter.swings = {{0, 0.5}};
  return link;
}

// Derived: rectangles one UI long do not overlap, so their folded spectrum is flat, and a second
// one of 0.9 makes the channel 1 + 0.9 D with noise eta0 / (2 T) per energy of the first.
TEST(Bounds, OfALinkAreThoseOfItsPulse) {
  constexpr int kPerUi = 16;
  Eigen::VectorXd p = Eigen::VectorXd::Zero(4 * kPerUi * 256);
  p.segment(kPerUi, kPerUi).setConstant(0.2);
  const auto alone = equalizer_bounds(prepare(link_with_density(p, kPerUi)), 0);
  ASSERT_TRUE(alone.has_value());
  const double expected = 2.0 * 0.1 * 0.1 * 1e-9 / 2e-12;
  EXPECT_NEAR(alone->matched_filter / expected, 1.0, 1e-12);
  EXPECT_NEAR(alone->linear / expected, 1.0, 1e-12);
  EXPECT_NEAR(alone->feedback / expected, 1.0, 1e-12);

  p.segment(2 * kPerUi, kPerUi).setConstant(0.18);
  const auto two = equalizer_bounds(prepare(link_with_density(p, kPerUi)), 0);
  const EqualizerBounds discrete = discrete_bounds(Eigen::Vector2d(1.0, 0.9), 1.0, 1.0 / expected);
  EXPECT_NEAR(two->linear / discrete.linear, 1.0, 1e-9);
  EXPECT_NEAR(two->feedback / discrete.feedback, 1.0, 1e-9);
}

TEST(Bounds, NeedADensityBeforeTheReceiver) {
  Link link = link_with_density(Eigen::VectorXd::Constant(8, 0.1), 4);
  link.channel.at_slicer = true;
  EXPECT_FALSE(equalizer_bounds(prepare(link), 0).has_value());
  link = link_with_density(Eigen::VectorXd::Constant(8, 0.1), 4);
  link.device.receiver.noise_density_v2_per_hz.reset();
  link.device.receiver.noise_rms_v = 1e-3;
  EXPECT_FALSE(equalizer_bounds(prepare(link), 0).has_value());
}

// Derived: 0.4^2 over 0.003^2 + 0.1^2 + 0.05^2, and the same symbols a fraction of the power.
TEST(Bounds, SignalToDistortionOfAHandCase) {
  Link link = test::link_of_pulse(Eigen::Vector3d(0.1, 0.4, -0.05), 1);
  link.device.receiver.noise_rms_v = 0.003;
  const Settings settings = test::plain_settings(link);
  EXPECT_NEAR(signal_to_distortion(prepare(link), settings), 0.16 / (9e-6 + 0.0125), 1e-9);
  link.signal.levels = 4;  // sigma_X^2 = 5/9
  EXPECT_NEAR(signal_to_distortion(prepare(link), settings),
              5.0 / 9.0 * 0.16 / (9e-6 + 5.0 / 9.0 * 0.0125), 1e-9);
}

// checks.md row 22, derived: Poisson. ln 20 = 2.9957.
TEST(Bounds, BitsToProveAnErrorRatio) {
  const double bits = bits_to_prove(1e-12, 0.95);
  EXPECT_NEAR(bits, 3.0e12, 0.05e12);
  EXPECT_NEAR(bits, std::log(20.0) * 1e12, 1e-12 * bits);
  EXPECT_NEAR(bits / 6.25e9, 479.0, 0.5);
  // With two errors seen: e^-m (1 + m + m^2/2) = 0.05.
  const double m = bits_to_prove(1e-9, 0.95, 2) * 1e-9;
  EXPECT_NEAR(std::exp(-m) * (1.0 + m + 0.5 * m * m), 0.05, 1e-12);
  EXPECT_THROW((void)bits_to_prove(0.0, 0.95), std::invalid_argument);
  EXPECT_THROW((void)bits_to_prove(1e-12, 1.0), std::invalid_argument);
  EXPECT_THROW((void)bits_to_prove(1e-12, 0.95, -1), std::invalid_argument);
}

TEST(Bounds, RefuseWhatIsNoSpectrumOrChannel) {
  EXPECT_THROW((void)bounds_of_folded_spectrum(Eigen::VectorXd()), std::invalid_argument);
  EXPECT_THROW((void)bounds_of_folded_spectrum(Eigen::VectorXd::Constant(1, -1.0)),
               std::invalid_argument);
  EXPECT_THROW((void)discrete_bounds(Eigen::Vector2d(1.0, 0.5), 1.0, 0.0), std::invalid_argument);
  EXPECT_THROW((void)finite_mmse(Eigen::Vector2d(1.0, 0.5), 2, 1, 7, 1.0, 0.1),
               std::invalid_argument);
}

}  // namespace
}  // namespace tapwright

#include "tapwright/equalizer/ctle.hpp"

#include <gtest/gtest.h>

#include "support/python.hpp"
#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

CtleState reference_state(double gain_db, double fz_ghz, double p1_ghz, double p2_ghz) {
  return {0, "", CtleReference{gain_db, ghz_to_hz(fz_ghz), ghz_to_hz(p1_ghz), ghz_to_hz(p2_ghz), {}},
          {}};
}

TEST(NoiseFilter, HasThreeDecibelAtItsBandwidth) {
  // IEEE 802.3 Annex 93A: fourth-order Butterworth; its coefficients have seven digits (method).
  const Eigen::VectorXcd h = noise_filter_response(4.7e9, Eigen::Vector2d(0.0, 4.7e9));
  EXPECT_DOUBLE_EQ(std::abs(h[0]), 1.0);
  EXPECT_NEAR(std::norm(h[1]), 0.5, 1e-6);
}

TEST(NoiseFilter, AndCtleMatchScipy) {
  if (!test::has_scipy()) GTEST_SKIP() << "no scipy";
  const auto outside = test::run_python("tests/outside/equalizer_reference.py");
  ASSERT_TRUE(outside);
  const std::vector<double> ghz = (*outside)["ghz"];
  const Eigen::VectorXd f_hz =
      1e9 * Eigen::Map<const Eigen::VectorXd>(ghz.data(), static_cast<Eigen::Index>(ghz.size()));
  const Eigen::VectorXcd filter = noise_filter_response(4.7e9, f_hz);
  const Eigen::VectorXcd ctle = response(reference_state(-6.0, 2.0, 2.0, 8.0), f_hz);
  for (Eigen::Index i = 0; i < f_hz.size(); ++i) {
    const auto at = static_cast<std::size_t>(i);
    const std::complex<double> want_filter((*outside)["butterworth"]["re"][at],
                                           (*outside)["butterworth"]["im"][at]);
    const std::complex<double> want_ctle((*outside)["ctle"]["re"][at],
                                         (*outside)["ctle"]["im"][at]);
    // Method: the annex prints its coefficients with seven digits.
    EXPECT_NEAR(std::abs(filter[i] - want_filter), 0.0, 2e-6 * std::abs(want_filter)) << ghz[at];
    // Rounding: a dozen operations of order 1.
    EXPECT_NEAR(std::abs(ctle[i] - want_ctle), 0.0, 1e-13) << ghz[at];
  }
  // PCI Express base specification, reference equalizer (from memory; peak recomputed by scipy).
  EXPECT_NEAR((*outside)["ctle_peak_db"].get<double>(), -1.64, 0.005);
  EXPECT_NEAR((*outside)["ctle_peak_ghz"].get<double>(), 3.57, 0.005);
  const double peak_hz = ghz_to_hz((*outside)["ctle_peak_ghz"].get<double>());
  const Eigen::VectorXcd peak =
      response(reference_state(-6.0, 2.0, 2.0, 8.0), Eigen::VectorXd::Constant(1, peak_hz));
  EXPECT_NEAR(ratio_to_amplitude_db(std::abs(peak[0])), (*outside)["ctle_peak_db"].get<double>(),
              1e-9);

  // Noise: 1.02617 f_r, and 1.0158 mV for 5.2e-8 V^2/GHz at 19.336 GHz (checks.md row 15).
  const CtleState flat{0, "", CtleZerosPoles{}, {}};
  const double bandwidth = (*outside)["butterworth_noise_bandwidth"];
  EXPECT_NEAR(bandwidth, 1.02617, 5e-6);
  const double noise_v = filtered_noise_v(5.2e-17, 19.336e9, flat);
  EXPECT_NEAR(noise_v, std::sqrt(5.2e-17 * 19.336e9 * bandwidth), 1e-6 * noise_v);  // seven digits
  EXPECT_NEAR(noise_v, 1.0158e-3, 5e-8);
  const double with_ctle_v = filtered_noise_v(1e-18, 4.7e9, reference_state(-4, 1.5625, 1.5625, 6.25));
  const double want_v = std::sqrt(1e-9 * (*outside)["power_ghz"].get<double>());
  EXPECT_NEAR(with_ctle_v, want_v, 1e-6 * want_v);
}

TEST(Ctle, PutsTheZeroAtTheGainTimesFz) {
  // At f = f_z 10^(g/20) the numerator is g0 (1 + j): 3.01 dB up and 45 degrees.
  const double g0 = amplitude_db_to_ratio(-6.0);
  const CtleState state = reference_state(-6.0, 2.0, 1e9, 1e9);  // poles out of the way
  const std::complex<double> h = response(state, Eigen::VectorXd::Constant(1, 2e9 * g0))[0];
  EXPECT_NEAR(std::abs(h), g0 * std::sqrt(2.0), 1e-9);
  EXPECT_NEAR(std::arg(h), std::numbers::pi / 4, 1e-8);
}

TEST(Ctle, ReferenceFormEqualsTheSameZerosAndPoles) {
  const CtleState state = reference_state(-3.0, 1.5, 1.5, 6.0);
  const double g0 = amplitude_db_to_ratio(-3.0);
  const CtleState listed{0, "", CtleZerosPoles{g0, {1.5e9 * g0}, {1.5e9, 6e9}}, Code{3, 1.25}};
  const Eigen::VectorXd f_hz = Eigen::VectorXd::LinSpaced(50, 0.0, 20e9);
  // Rounding: a dozen operations of order 1.
  EXPECT_LT((1.25 * response(state, f_hz) - response(listed, f_hz)).cwiseAbs().maxCoeff(), 1e-14);
  EXPECT_NEAR(filtered_noise_v(1e-17, {}, listed), 1.25 * filtered_noise_v(1e-17, {}, state),
              1e-10 * filtered_noise_v(1e-17, {}, listed));
}

TEST(Ctle, LowFrequencyStageLeavesHighFrequenciesAlone) {
  CtleReference form{-3.0, 1.5e9, 1.5e9, 6e9, CtleReference::LowFrequency{-2.0, 2e7}};
  const CtleState with{0, "", form, {}};
  form.low_frequency.reset();
  const CtleState without{0, "", form, {}};
  const Eigen::Vector2d f_hz(0.0, 10e9);
  const Eigen::VectorXcd ratio = response(with, f_hz).cwiseQuotient(response(without, f_hz));
  EXPECT_NEAR(ratio_to_amplitude_db(std::abs(ratio[0])), -2.0, 1e-12);
  EXPECT_NEAR(std::abs(ratio[1]), 1.0, 1e-5);  // exact: (g^2 + x^2)/(1 + x^2), x = 500
}

TEST(Ctle, MeasuredResponseIsInterpolatedOnMagnitudeAndUnwrappedPhase) {
  CtleMeasured measured{Eigen::Vector3d(1e9, 2e9, 3e9), Eigen::VectorXcd(3)};
  measured.values << std::polar(1.0, 0.0), std::polar(2.0, 3.0), std::polar(3.0, 6.0);
  const CtleState state{0, "", measured, {}};
  const Eigen::VectorXcd h = response(state, Eigen::Vector4d(1.5e9, 2.5e9, 9e9, 0.0));
  EXPECT_NEAR(std::abs(h[0] - std::polar(1.5, 1.5)), 0.0, 1e-14);
  EXPECT_NEAR(std::abs(h[1] - std::polar(2.5, 4.5)), 0.0, 1e-14);
  EXPECT_NEAR(std::abs(h[2] - std::polar(3.0, 6.0)), 0.0, 1e-14);
  EXPECT_NEAR(std::abs(h[3] - 1.0), 0.0, 1e-14);
}

TEST(Ctle, MeasuredSamplesOfAFormGiveItsNoise) {
  const CtleState form = reference_state(-4.0, 1.5, 1.5, 6.0);
  CtleMeasured measured{Eigen::VectorXd::LinSpaced(4001, 0.0, 80e9), {}};
  measured.values = response(form, measured.frequencies_hz);
  const double want_v = filtered_noise_v(1e-17, 4.7e9, form);
  // Method: linear interpolation between points 20 MHz apart on corners of GHz, error O(1e-5).
  EXPECT_NEAR(filtered_noise_v(1e-17, 4.7e9, {0, "", measured, {}}), want_v, 2e-5 * want_v);
}

TEST(FilteredNoise, RefusesAnIntegralWithoutBound) {
  EXPECT_THROW((void)filtered_noise_v(1e-17, {}, {0, "", CtleZerosPoles{}, {}}),
               std::invalid_argument);
  EXPECT_THROW((void)filtered_noise_v(
                   1e-17, {},
                   {0, "", CtleMeasured{Eigen::VectorXd::Ones(1), Eigen::VectorXcd::Ones(1)}, {}}),
               std::invalid_argument);
}

}  // namespace
}  // namespace tapwright

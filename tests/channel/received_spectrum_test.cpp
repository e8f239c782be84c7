#include "tapwright/channel/received_spectrum.hpp"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <complex>
#include <numbers>

#include "tapwright/base/fft.hpp"

namespace tapwright {
namespace {

using Complex = std::complex<double>;
using std::numbers::pi;

constexpr double kUi = 100e-12;

template <class Function>
FrequencyResponse sampled(double step_hz, int n, Function at) {
  FrequencyResponse out{Eigen::VectorXd(n), Eigen::VectorXcd(n)};
  for (int k = 0; k < n; ++k) {
    out.frequencies_hz[k] = step_hz * (k + 1);
    out.values[k] = at(out.frequencies_hz[k]);
  }
  return out;
}

TEST(ReceivedSpectrum, GivesTheClosedFormOfAOnePoleChannel) {
  const double tau = 0.6 * kUi, delay = 3 * kUi;
  const FrequencyResponse response = sampled(20e6, 7500, [&](double f) {
    return std::polar(1.0, -2 * pi * f * delay) / Complex(1, 2 * pi * f * tau);
  });
  const auto result = received_spectrum(response, {kUi, 32}, {}, "x");
  ASSERT_TRUE(result);
  EXPECT_TRUE(result.notes.empty()) << to_string(result.notes[0]);
  const ReceivedSpectrum& r = *result.value;
  EXPECT_EQ(r.num_samples % 32, 0);
  EXPECT_GE(static_cast<double>(r.num_samples) * kUi / 32, 1 / 20e6);
  const Eigen::VectorXd p = real_record(r.values, r.num_samples);
  // Derivation, exact: 1 - e^{-t/tau} for one UI, then the decay. Method: above the grid's 16 f_b
  // the spectrum is at most 1 / (2 pi^2 f^2 tau); what a cut there can take from a corner, where
  // all parts add up, is its integral, 1 / (pi^2 * 14.5 * 0.6) = 1.2e-2, and a tenth a few samples
  // away.
  const int start = static_cast<int>(std::lround((-r.start_s + delay) / (kUi / 32)));
  for (int i = 0; i < 320; ++i) {
    const double t = i * kUi / 32;
    const double rise = 1 - std::exp(-t / tau);
    const double want = t < kUi ? rise : rise - (1 - std::exp(-(t - kUi) / tau));
    const bool at_corner = i < 3 || std::abs(i - 32) < 3;
    EXPECT_NEAR(p[start + i], want, at_corner ? 1.2e-2 : 1.2e-3) << i;
  }
}

TEST(ReceivedSpectrum, KeepsTheAreaOfThePulse) {
  // At f = 0 the spectrum is T H(0): the samples add up to samples_per_ui times H(0).
  const FrequencyResponse response =
      sampled(10e6, 2000, [&](double f) { return 0.8 * std::polar(1.0, -2 * pi * f * 2e-9); });
  const auto result = received_spectrum(response, {kUi, 16}, {}, "x");
  ASSERT_TRUE(result);
  EXPECT_NEAR(result.value->values[0].real(), 16 * 0.8, 1e-12);  // rounding
}

TEST(ReceivedSpectrum, EdgeFilterHasTheStatedRiseTime) {
  // Step response of a Gaussian: 20-80 % takes 2 * 0.84162 sigma (normal tables), and
  // H = exp(-(2 pi f sigma)^2 / 2). The annex's 1.6832 is that rounded to 4 decimals.
  const double t_r = 30e-12;
  const double sigma = t_r / (2 * 0.8416212335729143);
  for (const double f : {1e9, 5e9, 12e9}) {
    const Complex h = launch_response({t_r, {}}, Eigen::VectorXd::Constant(1, f))[0];
    EXPECT_NEAR(h.real(), std::exp(-0.5 * std::pow(2 * pi * f * sigma, 2)), 1e-4);
  }
  // 3 dB at 0.2230 / t_r (math.md section 1), rounded to 4 decimals.
  const Complex h = launch_response({t_r, {}}, Eigen::VectorXd::Constant(1, 0.2230 / t_r))[0];
  EXPECT_NEAR(std::abs(h), std::sqrt(0.5), 2e-4);
}

TEST(ReceivedSpectrum, AcCouplingTakesTheMeanAway) {
  const FrequencyResponse response = sampled(10e6, 2000, [](double) { return 1.0; });
  const auto result = received_spectrum(response, {kUi, 16}, {{}, 5e6}, "x");
  ASSERT_TRUE(result);
  EXPECT_EQ(result.value->values[0], 0.0);
  // Seven time constants of 1 / (2 pi 5 MHz).
  EXPECT_GE(static_cast<double>(result.value->num_samples) * kUi / 16, 7 / (2 * pi * 5e6));
}

TEST(ReceivedSpectrum, TellsWhatLiesAboveTheLastPoint) {
  const FrequencyResponse response =
      sampled(10e6, 400, [](double f) { return std::polar(1.0, -2 * pi * f * 1e-9); });
  const auto result = received_spectrum(response, {kUi, 32}, {}, "short.s2p");
  ASSERT_TRUE(result);
  ASSERT_EQ(result.notes.size(), 1u);
  // A flat channel cut at 0.4 f_b: the share of the energy of sinc^2 above it, by quadrature; the
  // taper over the next 0.04 keeps at most 2 * 0.04 * sinc(0.4)^2 = 0.046 of it.
  double kept = 0.0;
  for (int i = 0; i < 4000; ++i) {
    const double x = (i + 0.5) * 1e-4;
    kept += 2e-4 * std::pow(std::sin(pi * x) / (pi * x), 2);
  }
  EXPECT_NEAR(result.value->energy_above_last_point, 1 - kept, 0.046);
  EXPECT_LT(result.value->energy_above_last_point, 1 - kept);
  EXPECT_NE(result.notes[0].message.find("above the last point, 4 GHz"), std::string::npos);
  EXPECT_NE(result.notes[0].message.find(" mV at 1 V launch"), std::string::npos);
}

TEST(ReceivedSpectrum, SeesTheNoiseOfAMeasurement) {
  unsigned state = 1;
  const auto uniform = [&] {
    state = state * 1664525u + 1013904223u;
    return static_cast<double>(state) / 4294967296.0 - 0.5;
  };
  const double size = 0.2;
  const int n = 2000;
  const FrequencyResponse response = sampled(10e6, n, [&](double f) {
    return std::polar(1.0, -2 * pi * f * 1e-9) + size * Complex(uniform(), uniform());
  });
  const auto result = received_spectrum(response, {kUi, 32}, {}, "noisy.s2p");
  ASSERT_TRUE(result);
  // Parseval: bin k adds 2 (df T sinc(fT))^2 times the noise's variance, size^2 / 12 in each part.
  double power = 0.0;
  for (int k = 1; k <= n; ++k) {
    const double x = 10e6 * k * kUi;
    power += 2 * std::pow(10e6 * kUi * std::sin(pi * x) / (pi * x), 2) * size * size / 6;
  }
  // Statistical: the RMS of at least 24 independent values (one per UI) scatters by 1 / sqrt(48);
  // three sigma.
  EXPECT_NEAR(result.value->record_noise_v, std::sqrt(power), 3 / std::sqrt(48) * std::sqrt(power));
  EXPECT_TRUE(std::any_of(result.notes.begin(), result.notes.end(), [](const Diagnostic& note) {
    return note.message.starts_with("the record carries noise of ");
  }));
}

TEST(ReceivedSpectrum, TellsHowMuchTheWayToDcIsWorth) {
  // exp(-b sqrt(f)) seen from 200 MHz on: H(0) = 1 is found by the law itself, and the first point
  // is exp(-0.1): what was extrapolated is 1 - exp(-0.1) = 95.2 mV.
  const double b = 0.1 / std::sqrt(200e6);
  FrequencyResponse response{Eigen::VectorXd(100), Eigen::VectorXcd(100)};
  for (int k = 0; k < 100; ++k) {
    const double f = response.frequencies_hz[k] = 200e6 * (k + 1);
    response.values[k] = std::exp(-b * std::sqrt(f) * Complex(1, 1));
  }
  const auto result = received_spectrum(response, {kUi, 32}, {}, "high.s2p");
  ASSERT_TRUE(result);
  ASSERT_GE(result.notes.size(), 1u);
  EXPECT_EQ(
      to_string(result.notes[0]),
      "high.s2p: warning: below the first point, 200 MHz, the response is extrapolated to 1 at "
      "DC; all of that is worth 95.2 mV of the sum of cursors at 1 V launch");
}

TEST(ReceivedSpectrum, RefusesGridsAndShapesThatMakeNoSense) {
  const FrequencyResponse response = sampled(10e6, 100, [](double) { return 1.0; });
  EXPECT_FALSE(received_spectrum(response, {0.0, 32}, {}, "x"));
  EXPECT_FALSE(received_spectrum(response, {kUi, 1}, {}, "x"));
  EXPECT_FALSE(received_spectrum(response, {kUi, 32}, {-1e-12, {}}, "x"));
  EXPECT_FALSE(received_spectrum(response, {kUi, 32}, {{}, 0.0}, "x"));
}

TEST(ReceivedSpectrum, KeepsAnImportedPulseOnTheSameGrid) {
  const Eigen::VectorXd samples = Eigen::VectorXd::LinSpaced(77, 1.0, 0.0);
  for (const int m : {1, 8}) {
    const auto result =
        received_spectrum(PulseResponse(samples, m, kUi), {kUi, m == 1 ? 32 : 8}, "x");
    ASSERT_TRUE(result);
    const ReceivedSpectrum& r = *result.value;
    EXPECT_EQ(r.samples_per_ui, m);
    const Eigen::VectorXd p = real_record(r.values, r.num_samples);
    // Rounding of two transforms of less than 1024 points.
    EXPECT_LT((p.head(77) - samples).cwiseAbs().maxCoeff(), 2 * 10 * 2.3e-16);
    EXPECT_LT(p.tail(p.size() - 77).cwiseAbs().maxCoeff(), 2 * 10 * 2.3e-16);
  }
}

TEST(ReceivedSpectrum, ResamplesAnImportedPulse) {
  // A Gaussian of half a UI, sampled ten times per UI.
  const auto at = [](double t_ui) { return std::exp(-2 * (t_ui - 6) * (t_ui - 6)); };
  Eigen::VectorXd samples(121);
  for (int i = 0; i < 121; ++i) samples[i] = at(i / 10.0);
  const auto result = received_spectrum(PulseResponse(samples, 10, kUi), {kUi, 32}, "x");
  ASSERT_TRUE(result);
  EXPECT_TRUE(result.notes.empty());
  const Eigen::VectorXd p = real_record(result.value->values, result.value->num_samples);
  for (int i = 0; i < 380; ++i) {
    // Method: h^6 / 720 times the sixth derivative, at most 15 * 4^3 per UI^6.
    EXPECT_NEAR(p[i], at(i / 32.0), 1e-6 / 720 * 15 * 64 * 2) << i;
  }
}

TEST(ReceivedSpectrum, TellsWhenAnImportedPulseIsCutShort) {
  Eigen::VectorXd samples = Eigen::VectorXd::Constant(80, 0.3);
  samples[8] = 1.0;
  const auto result = received_spectrum(PulseResponse(samples, 8, kUi), {kUi, 8}, "cut.csv");
  ASSERT_TRUE(result);
  ASSERT_EQ(result.notes.size(), 1u);
  EXPECT_NE(result.notes[0].message.find("still stands at 300 mV"), std::string::npos);
}

TEST(ReceivedSpectrum, RefusesAnImportedPulseOfAnotherRate) {
  const auto result =
      received_spectrum(PulseResponse(Eigen::VectorXd::Ones(8), 8, 2 * kUi), {kUi, 8}, "p.csv");
  ASSERT_FALSE(result);
  EXPECT_EQ(to_string(result.notes[0]),
            "p.csv: error: the pulse was taken with a unit interval of 200 ps; wanted the link's, "
            "100 ps");
}

}  // namespace
}  // namespace tapwright

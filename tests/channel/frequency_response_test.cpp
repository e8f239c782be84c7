#include "tapwright/channel/frequency_response.hpp"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <complex>
#include <numbers>

namespace tapwright {
namespace {

using Complex = std::complex<double>;
using std::numbers::pi;

/// A skin-effect line with a delay: exp(-b sqrt(j 2 pi f) - j 2 pi f delay).
Complex line_at(double f, double b, double delay_s) {
  return std::exp(-b * std::sqrt(Complex(0, 2 * pi * f))) * std::polar(1.0, -2 * pi * f * delay_s);
}

FrequencyResponse line(double step_hz, int n, double b, double delay_s) {
  FrequencyResponse out{Eigen::VectorXd(n), Eigen::VectorXcd(n)};
  for (int k = 0; k < n; ++k) {
    out.frequencies_hz[k] = step_hz * (k + 1);
    out.values[k] = line_at(out.frequencies_hz[k], b, delay_s);
  }
  return out;
}

TEST(FrequencyResponse, ComesThroughItsOwnPointsUnchanged) {
  const FrequencyResponse response = line(10e6, 1000, 1e-6, 40e-9);
  const auto result = interpolate(response, response.frequencies_hz, "x");
  ASSERT_TRUE(result);
  EXPECT_TRUE(result.notes.empty());
  // Rounding: 400 turns of phase, in and out, of half an ulp each.
  EXPECT_LT((*result.value - response.values).cwiseAbs().maxCoeff(), 2 * 400 * 2 * pi * 1.2e-16);
}

TEST(FrequencyResponse, SurvivesManyTurnsBetweenPointsAndReachesDc) {
  // 0.4 turns per step, 400 in all.
  const double b = 1.2e-6, delay_s = 40e-9, step_hz = 10e6;
  const FrequencyResponse response = line(step_hz, 1000, b, delay_s);
  const Eigen::VectorXd f = Eigen::VectorXd::LinSpaced(9001, 0.0, 9.9e9);
  const auto result = interpolate(response, f, "x");
  ASSERT_TRUE(result);
  for (Eigen::Index k = 0; k < f.size(); ++k) {
    // Method: linear interpolation errs by at most h^2 / 8 times the second derivative, which is
    // |b sqrt(j 2 pi f)| / (4 f^2) for the exponent and less than twice that for the whole while
    // the exponent stays under 1. Below the first point the law itself is used.
    const double x = std::max(step_hz * std::floor(f[k] / step_hz), step_hz);
    const double bound = 2 * step_hz * step_hz / 8 * b * std::sqrt(2 * pi * x) / (4 * x * x) + 1e-9;
    EXPECT_LT(std::abs((*result.value)[k] - line_at(f[k], b, delay_s)), bound) << f[k];
  }
}

TEST(FrequencyResponse, KeepsTheSignOfAnInvertedPathAtDc) {
  FrequencyResponse response = line(10e6, 500, 1e-6, 5e-9);
  response.values *= -1.0;
  const auto result = interpolate(response, Eigen::VectorXd::Zero(1), "x");
  ASSERT_TRUE(result);
  // Rounding: the fit meets a law of its own kind.
  EXPECT_NEAR((*result.value)[0].real(), -1.0, 1e-12);
  EXPECT_NEAR((*result.value)[0].imag(), 0.0, 1e-15);
}

TEST(FrequencyResponse, PassesThroughANullWithoutGoingRoundIt) {
  // (1 + exp(-j 2 pi f d)) / 2 has nulls at odd multiples of 1/(2d), where its sign turns.
  const int n = 400;
  FrequencyResponse response{Eigen::VectorXd(n), Eigen::VectorXcd(n)};
  const auto at = [](double f) { return 0.5 + 0.5 * std::polar(1.0, -2 * pi * f * 1e-9); };
  for (int k = 0; k < n; ++k) {
    response.frequencies_hz[k] = 10e6 * k + 3e6;
    response.values[k] = at(response.frequencies_hz[k]);
  }
  const Eigen::VectorXd f = Eigen::VectorXd::LinSpaced(2000, 4e6, 3.9e9);
  const auto result = interpolate(response, f, "x");
  ASSERT_TRUE(result);
  // Method: without its delay d / 2 it is cos(pi f d): h^2 / 8 (pi d)^2; twice that for what the
  // found delay differs from d / 2.
  const double bound = 2 * 10e6 * 10e6 / 8 * std::pow(pi * 1e-9, 2);
  for (Eigen::Index k = 0; k < f.size(); ++k) {
    EXPECT_LT(std::abs((*result.value)[k] - at(f[k])), bound) << f[k];
  }
}

TEST(FrequencyResponse, FallsToZeroAtDcWhenAcCoupled) {
  FrequencyResponse response = line(10e6, 500, 1e-6, 5e-9);
  response.ac_coupled = true;
  const auto result = interpolate(response, Eigen::Vector2d(0.0, 5e6), "x");
  ASSERT_TRUE(result);
  EXPECT_EQ((*result.value)[0], 0.0);
  EXPECT_NEAR(std::abs((*result.value)[1]), 0.5 * std::abs(response.values[0]), 1e-15);
}

TEST(FrequencyResponse, SaysSoWhenTheLowEndLooksAcCoupled) {
  FrequencyResponse response = line(1e6, 500, 1e-6, 5e-9);
  for (int k = 0; k < 500; ++k) {
    const Complex x(0, response.frequencies_hz[k] / 3e6);
    response.values[k] *= x / (1.0 + x);
  }
  const auto result = interpolate(response, Eigen::VectorXd::Zero(1), "cable.s2p");
  ASSERT_TRUE(result);
  ASSERT_EQ(result.notes.size(), 1u);
  EXPECT_NE(to_string(result.notes[0]).find("if the path is AC-coupled, say so"),
            std::string::npos);
}

TEST(FrequencyResponse, RefusesAStepTooCoarseForTheDelay) {
  // 0.7 turns per step look like 0.3 turns forward.
  const auto result =
      interpolate(line(10e6, 500, 0.0, 70e-9), Eigen::VectorXd::Zero(1), "long.s2p");
  ASSERT_FALSE(result);
  ASSERT_EQ(result.notes.size(), 1u);
  EXPECT_EQ(to_string(result.notes[0]),
            "long.s2p: error: frequency step 10 MHz is too coarse for a delay of 70 ns; wanted a "
            "step under 1 / (2 delay) = 7.143 MHz");
}

TEST(FrequencyResponse, RefusesAWideStepAmongNarrowOnes) {
  FrequencyResponse response = line(1e6, 100, 1e-6, 70e-9);
  response.frequencies_hz.conservativeResize(102);
  response.values.conservativeResize(102);
  for (const int k : {100, 101}) {
    response.frequencies_hz[k] = 100e6 + (k - 99) * 8e6;
    response.values[k] = line_at(response.frequencies_hz[k], 1e-6, 70e-9);
  }
  const auto result = interpolate(response, Eigen::VectorXd::Zero(1), "s");
  ASSERT_FALSE(result);
  EXPECT_NE(result.notes[0].message.find("frequency step 8 MHz is too coarse"), std::string::npos);
}

TEST(FrequencyResponse, NamesWhatIsWrongWithTheNumbers) {
  FrequencyResponse response = line(10e6, 3, 1e-6, 1e-9);
  response.frequencies_hz[2] = response.frequencies_hz[1];
  EXPECT_NE(interpolate(response, Eigen::VectorXd(0), "s").notes.at(0).message.find("point 3"),
            std::string::npos);
  response = line(10e6, 3, 1e-6, 1e-9);
  response.values[1] = std::nan("");
  EXPECT_NE(interpolate(response, Eigen::VectorXd(0), "s").notes.at(0).message.find("2e+07 Hz"),
            std::string::npos);
  response = line(10e6, 1, 1e-6, 1e-9);
  EXPECT_NE(interpolate(response, Eigen::VectorXd(0), "s").notes.at(0).message.find("at least 2"),
            std::string::npos);
}

TEST(FrequencyResponse, FindsTheDelay) {
  const double b = 1e-7;
  // Skin effect adds b / (2 sqrt(2 pi f)) of delay: least at the top, b / (2 sqrt(2 pi 10 GHz)),
  // and on average over the band twice that, from the mean of f^-1/2.
  EXPECT_NEAR(bulk_delay_s(line(10e6, 1000, b, 12.3e-9)), 12.3e-9,
              2 * b / (2 * std::sqrt(2 * pi * 1e10)));
}

}  // namespace
}  // namespace tapwright

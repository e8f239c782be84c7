#include "tapwright/channel/linear_fit.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <numbers>
#include <random>
#include <string>

namespace tapwright {
namespace {

constexpr double kUi = 100e-12;

/// A known pulse with a pre-cursor, a long tail and a reflection, by time in UI from its peak; a
/// sum of Gaussians so that it is smooth at 8 samples per UI.
double pulse_at(double t_ui) {
  const auto bump = [&](double size, double at, double width) {
    return size * std::exp(-0.5 * std::pow((t_ui - at) / width, 2));
  };
  return bump(0.6, 0.0, 0.45) + bump(0.15, 1.1, 0.8) + bump(0.05, 3.0, 2.0) +
         bump(-0.04, 11.3, 0.5);
}

double gaussian(std::mt19937_64& random) {  // Box-Muller: the same everywhere
  const auto uniform = [&] { return (static_cast<double>(random() >> 11) + 0.5) * 0x1p-53; };
  return std::sqrt(-2 * std::log(uniform())) * std::cos(2 * std::numbers::pi * uniform());
}

struct Synthetic {
  Pattern pattern = Prbs{13};
  std::int64_t offset = 1234;  ///< symbol that peaks at the start of the record
  double rate_error = 50e-6;
  double snr_db = 30.0;
  double samples_per_ui = 8.3;  ///< at the told rate
  int num_ui = 12000;
  double scale_v = 1.0;  ///< launch; negative inverts
  double constant_v = 0.0;
  double phase_ui = 0.37;
  double noise_v = 0.0;  ///< out: RMS of the noise added
};

Capture waveform(Synthetic& s) {
  const auto n = static_cast<Eigen::Index>(s.num_ui * s.samples_per_ui);
  Capture c{Eigen::VectorXd(n), -3e-9, kUi / s.samples_per_ui};
  const Eigen::VectorXd levels = symbols(s.pattern, s.offset - 30, s.num_ui + 60);
  for (Eigen::Index i = 0; i < n; ++i) {
    const double t_ui = static_cast<double>(i) / s.samples_per_ui * (1 + s.rate_error) - s.phase_ui;
    const auto now = static_cast<Eigen::Index>(std::floor(t_ui));
    double v = 0.0;
    for (Eigen::Index k = now - 18; k <= now + 8; ++k) {
      v += levels[k + 30] * pulse_at(t_ui - static_cast<double>(k));
    }
    c.samples_v[i] = v * s.scale_v;
  }
  std::mt19937_64 random(7);
  s.noise_v = std::sqrt(c.samples_v.squaredNorm() / static_cast<double>(n)) *
              std::pow(10.0, -s.snr_db / 20);
  for (Eigen::Index i = 0; i < n; ++i) {
    c.samples_v[i] += s.noise_v * gaussian(random) + s.constant_v;
  }
  return c;
}

LinearFitOptions options() {
  LinearFitOptions o;
  o.symbol_rate_bd = 1 / kUi;
  o.num_pre_ui = 6;
  o.num_post_ui = 20;
  return o;
}

/// RMS and largest difference from the known pulse, at the shift in time that fits best: the phase
/// of the record is not known to the fit.
struct Difference {
  double rms = 0.0, largest = 0.0;
};

Difference difference(const PulseResponse& pulse, int num_pre) {
  const auto at_shift = [&](double shift_ui) {
    Difference d;
    for (Eigen::Index i = 0; i < pulse.size(); ++i) {
      const double t_ui = static_cast<double>(i) / pulse.samples_per_ui() - num_pre;
      const double e = pulse.at(i) - pulse_at(t_ui + shift_ui);
      d.rms += e * e / static_cast<double>(pulse.size());
      d.largest = std::max(d.largest, std::abs(e));
    }
    d.rms = std::sqrt(d.rms);
    return d;
  };
  double low = -0.6, high = 0.6;
  for (int i = 0; i < 100; ++i) {  // ternary search
    const double a = low + (high - low) / 3, b = high - (high - low) / 3;
    (at_shift(a).rms < at_shift(b).rms ? high : low) = at_shift(a).rms < at_shift(b).rms ? b : a;
  }
  return at_shift(0.5 * (low + high));
}

class LinearFitTest : public testing::TestWithParam<std::string> {};

TEST_P(LinearFitTest, FindsTheKnownPulseWithinTheNoise) {
  Synthetic s;
  s.pattern = *pattern_named(GetParam(), "x").value;
  const Capture c = waveform(s);
  const Result<LinearFit> result = fit_pulse(c, s.pattern, options(), "scope.csv");
  ASSERT_TRUE(result) << to_string(result.notes[0]);
  const LinearFit& fit = *result.value;
  EXPECT_FALSE(fit.inverted);
  EXPECT_EQ(fit.pattern_offset, s.offset % period(s.pattern));
  // The noise's own bound: each tap of a least-squares fit scatters by sigma / (sigma_X sqrt(N)).
  // Statistical: the RMS over some 27 x 8 independent taps within 4 / sqrt(2 * 216) of that; the
  // largest of 864 within 5 sigma.
  const double variance = std::get<Prbs>(s.pattern).pam4 ? 5.0 / 9.0 : 1.0;
  const double bound = s.noise_v / std::sqrt(variance * static_cast<double>(fit.num_symbols));
  const Difference d = difference(fit.pulse, 6);
  EXPECT_LT(d.rms, bound * (1 + 4 / std::sqrt(2 * 216.0)));
  EXPECT_LT(d.largest, 5 * bound);
  // Rate: the same bound on a slope over the record, sigma_T = sigma / (rms slope) sqrt(12 / n) /
  // N, rms slope about 0.6 per UI, n samples.
  const double n = static_cast<double>(c.samples_v.size());
  EXPECT_NEAR((fit.symbol_rate_bd * kUi - 1 - s.rate_error) * 1e6, 0.0,
              1e6 * 4 * s.noise_v / 0.4 * std::sqrt(12 / n) / s.num_ui);
  // The figure of fit: 30 dB; the spline that reads between samples smooths some noise away (its
  // mean gain on white noise is about 0.9 in power at most phases).
  EXPECT_NEAR(fit.snr_db, s.snr_db, 0.8);
  EXPECT_GE(fit.snr_db, s.snr_db - 0.05);
}

INSTANTIATE_TEST_SUITE_P(Patterns, LinearFitTest,
                         testing::Values("prbs9", "prbs11", "prbs13", "prbs13q", "prbs15", "prbs20",
                                         "prbs23", "prbs31"),
                         [](const auto& test) { return test.param; });

TEST(LinearFit, IsExactWithoutNoise) {
  Synthetic s;
  s.snr_db = 200.0;
  s.samples_per_ui = 10.0;
  const Result<LinearFit> result = fit_pulse(waveform(s), s.pattern, options(), "x");
  ASSERT_TRUE(result);
  // Method: the spline, h^6 / 720 times the sixth derivative: with a width of 4.5 samples
  // 15 / 720 / 4.5^6 * 0.6 = 1.5e-6 for each symbol, times the sum over neighbours.
  EXPECT_LT(difference(result.value->pulse, 6).largest, 1e-5);
  EXPECT_NEAR(result.value->symbol_rate_bd * kUi, 1 + 50e-6, 1e-9);
}

TEST(LinearFit, TurnsAnInvertedWaveformAndTakesItsOffsetAway) {
  Synthetic s;
  s.scale_v = -0.4;
  s.constant_v = 0.123;
  LinearFitOptions o = options();
  o.launch_v = 0.4;
  const Result<LinearFit> result = fit_pulse(waveform(s), s.pattern, o, "x");
  ASSERT_TRUE(result);
  EXPECT_TRUE(result.value->inverted);
  // Statistical, 5 sigma of a mean.
  EXPECT_NEAR(result.value->offset_v, 0.123,
              5 * s.noise_v / std::sqrt(static_cast<double>(result.value->num_symbols)));
  EXPECT_LT(difference(result.value->pulse, 6).largest,
            5 * s.noise_v / 0.4 / std::sqrt(static_cast<double>(result.value->num_symbols)));
  EXPECT_NE(result.notes.back().message.find("sign changed"), std::string::npos);
}

TEST(LinearFit, FollowsARateFarOffOverALongRecord) {
  Synthetic s;
  s.rate_error = -280e-6;
  s.num_ui = 40000;
  s.samples_per_ui = 5.0;
  const Result<LinearFit> result = fit_pulse(waveform(s), s.pattern, options(), "x");
  ASSERT_TRUE(result) << to_string(result.notes[0]);
  EXPECT_NEAR(result.value->symbol_rate_bd * kUi, 1 - 280e-6, 1e-8);
  EXPECT_EQ(result.value->pattern_offset, s.offset);
}

TEST(LinearFit, CutsThePulseToWhatAShortPatternCanTell) {
  Synthetic s;
  s.pattern = SymbolList{{1, 1, 1, -1, -1, 1,  -1, 1, 1, -1, -1, -1, 1,  -1, -1, -1,
                          1, 1, 1, -1, 1,  -1, 1,  1, 1, -1, -1, 1,  -1, -1, -1}};
  s.num_ui = 2000;
  s.offset = 4;
  LinearFitOptions o = options();
  o.num_post_ui = 40;
  const Result<LinearFit> result = fit_pulse(waveform(s), s.pattern, o, "x");
  ASSERT_TRUE(result) << to_string(result.notes[0]);
  EXPECT_EQ(result.value->pulse.size(), (6 + 23 + 1) * 32);
  EXPECT_NE(to_string(result.notes[0]).find("repeats after 31 symbols; the pulse is cut to 23 UI"),
            std::string::npos);
}

TEST(LinearFit, SaysWhenThePatternIsNotThere) {
  Synthetic s;
  const Capture c = waveform(s);
  const Result<LinearFit> other = fit_pulse(c, Prbs{15}, options(), "scope.csv");
  ASSERT_FALSE(other);
  EXPECT_EQ(to_string(other.notes.back()),
            "scope.csv: error: no trace of the pattern found; wanted the pattern named, at 10 GBd "
            "within 300 ppm");
  EXPECT_FALSE(fit_pulse(c, Prbs{31}, options(), "scope.csv"));
}

TEST(LinearFit, RefusesWhatCannotBeFitted) {
  Synthetic s;
  s.num_ui = 50;
  const Capture c = waveform(s);
  EXPECT_EQ(to_string(fit_pulse(c, s.pattern, options(), "w.csv").notes.at(0)),
            "w.csv: error: found a waveform of 49 UI; wanted at least 60 for a pulse of 27 UI");
  LinearFitOptions o = options();
  o.symbol_rate_bd = 1 / kUi * 5;
  EXPECT_EQ(
      to_string(fit_pulse(c, s.pattern, o, "w.csv").notes.at(0)),
      "w.csv: error: found 1.66 samples per UI in the waveform; wanted 2 or more; is the unit "
      "of time right?");
  o = options();
  o.launch_v = 0;
  EXPECT_FALSE(fit_pulse(c, s.pattern, o, "w.csv"));
  const Pattern constant = SymbolList{std::vector<double>(100, 1.0)};
  Synthetic long_one;
  long_one.num_ui = 500;
  const auto still = fit_pulse(waveform(long_one), constant, options(), "w.csv");
  ASSERT_FALSE(still);
}

}  // namespace
}  // namespace tapwright

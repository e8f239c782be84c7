// What must hold for any link whatever its numbers: how the proven optimum answers to a change of
// the channel, of the limits and of the disturbances. Each test runs on many seeded random links.

#include <gtest/gtest.h>

#include <random>
#include <string>

#include "tapwright/base/fft.hpp"
#include "tapwright/eye/eye_model.hpp"
#include "tapwright/search/solve.hpp"

namespace tapwright {
namespace {

constexpr int kSamplesPerUi = 8;
constexpr int kNumUi = 64;

double uniform(std::mt19937_64& random, double low, double high) {
  return low + (high - low) * static_cast<double>(random() >> 11) * 0x1p-53;
}

ReceivedSpectrum spectrum_of(const Eigen::VectorXd& samples_v) {
  ReceivedSpectrum spectrum;
  spectrum.values = real_spectrum(samples_v);
  spectrum.num_samples = samples_v.size();
  spectrum.samples_per_ui = kSamplesPerUi;
  spectrum.ui_s = 100e-12;
  return spectrum;
}

/// A dispersed pulse with a few echoes, 1 V launch; never negative at its peak.
Eigen::VectorXd random_pulse(std::mt19937_64& random) {
  Eigen::VectorXd samples_v = Eigen::VectorXd::Zero(kNumUi * kSamplesPerUi);
  const double rise = uniform(random, 2.0, 6.0);
  const double fall = uniform(random, 4.0, 14.0);
  const int start = 12 * kSamplesPerUi;
  for (int echo = 0; echo < 4; ++echo) {
    const double size = echo == 0 ? uniform(random, 0.5, 0.9) : uniform(random, -0.06, 0.06);
    const int delay = echo == 0 ? 0 : static_cast<int>(uniform(random, 8.0, 160.0));
    for (int i = 0; i < 200; ++i) {
      samples_v[start + delay + i] += size * (std::exp(-i / fall) - std::exp(-i / (0.4 * rise)));
    }
  }
  return samples_v;
}

CtleState boost(int code, double dc_gain_db) {
  CtleReference reference;
  reference.dc_gain_db = dc_gain_db;
  reference.f_z_hz = reference.f_p1_hz = 2.5e9;
  reference.f_p2_hz = 10e9;
  return {code, std::to_string(dc_gain_db) + " dB", reference, std::nullopt};
}

FirTap stepped_tap(int position, double min, double max) {
  return {position, min, max, codes_from_step(min, max, 0.05), false};
}

Link random_link(std::mt19937_64& random) {
  Link link;
  link.signal.symbol_rate_bd = 10e9;
  link.signal.levels = random() % 3 == 0 ? 4 : 2;
  link.signal.span_ui = {{6, 40}};
  link.samples_per_ui = kSamplesPerUi;
  link.channel = spectrum_of(random_pulse(random));
  link.device.transmitter.swings = {{0, 0.25}, {1, 0.5}};
  link.device.transmitter.fir.taps = {stepped_tap(-1, -0.25, 0.0), stepped_tap(0, 0.5, 1.0),
                                      stepped_tap(1, -0.4, 0.0)};
  link.device.receiver.ctle = {boost(0, 0.0), boost(1, -3.0)};
  link.device.receiver.dfe = {{1, uniform(random, 0.01, 0.06), false, {}},
                              {2, uniform(random, 0.01, 0.06), false, {}}};
  link.device.receiver.noise_rms_v = random() % 2 == 0 ? 0.0 : 1e-3;
  return link;
}

/// The proven optimum of the worst case in volts.
double optimum_v(const Link& link) {
  SearchOptions options;
  options.compare = false;
  const EyeModel model = prepare(link);
  const Solution solution = solve(model, options);
  EXPECT_EQ(solution.proof.kind, Proof::Kind::kProven) << solution.proof.reason;
  return solution.score.height.worst_case_v;
}

class Property : public testing::TestWithParam<unsigned> {
 protected:
  std::mt19937_64 random_{GetParam()};
  Link link_ = random_link(random_);
  // Rounding: a height adds up some 50 cursors of at most 0.5 V, and transforms of 512 samples err
  // by a few eps of the peak: 50 * 10 * eps * 0.5 V = 6e-14 V, with a hundredfold margin.
  static constexpr double kRoundingV = 1e-11;
};

TEST_P(Property, ScalingTheChannelAndAllVoltsScalesTheEye) {
  const double factor = 2.5;
  Link scaled = link_;
  scaled.channel.values *= factor;
  for (DfeTap& tap : scaled.device.receiver.dfe) tap.max *= factor;
  *scaled.device.receiver.noise_rms_v *= factor;
  EXPECT_NEAR(optimum_v(scaled), factor * optimum_v(link_), kRoundingV);
}

TEST_P(Property, DelayChangesNothing) {
  Eigen::VectorXd samples_v = real_record(link_.channel.values, link_.channel.num_samples);
  const Eigen::Index by = 5 * kSamplesPerUi + 3;
  Eigen::VectorXd later_v(samples_v.size());
  later_v << samples_v.tail(by), samples_v.head(samples_v.size() - by);
  Link delayed = link_;
  delayed.channel = spectrum_of(later_v);
  EXPECT_NEAR(optimum_v(delayed), optimum_v(link_), kRoundingV);
}

TEST_P(Property, AnotherTapIsNeverWorse) {
  const double before_v = optimum_v(link_);
  Link more_fir = link_;
  more_fir.device.transmitter.fir.taps.push_back(stepped_tap(2, -0.1, 0.1));
  EXPECT_GE(optimum_v(more_fir), before_v - kRoundingV);
  Link more_dfe = link_;
  more_dfe.device.receiver.dfe.push_back({4, 0.02, false, {}});
  EXPECT_GE(optimum_v(more_dfe), before_v - kRoundingV);
}

TEST_P(Property, AnotherStateOrSwingIsNeverWorse) {
  const double before_v = optimum_v(link_);
  Link more_states = link_;
  more_states.device.receiver.ctle.push_back(boost(2, -6.0));
  EXPECT_GE(optimum_v(more_states), before_v - kRoundingV);
  Link more_swings = link_;
  more_swings.device.transmitter.swings.push_back({2, 0.6});
  EXPECT_GE(optimum_v(more_swings), before_v - kRoundingV);
}

TEST_P(Property, AWiderLimitIsNeverWorse) {
  const double before_v = optimum_v(link_);
  Link wider_fir = link_;
  wider_fir.device.transmitter.fir.taps[0] = stepped_tap(-1, -0.35, 0.1);
  EXPECT_GE(optimum_v(wider_fir), before_v - kRoundingV);
  Link wider_dfe = link_;
  for (DfeTap& tap : wider_dfe.device.receiver.dfe) tap.max *= 1.5;
  EXPECT_GE(optimum_v(wider_dfe), before_v - kRoundingV);
  Link finer = link_;
  finer.device.transmitter.fir.taps[2].codes = codes_from_step(-0.4, 0.0, 0.025);
  EXPECT_GE(optimum_v(finer), before_v - kRoundingV);
}

TEST_P(Property, MoreDisturbanceIsNeverBetter) {
  const double before_v = optimum_v(link_);
  Link noisier = link_;
  *noisier.device.receiver.noise_rms_v += 2e-3;
  EXPECT_LT(optimum_v(noisier), before_v);
  Link crossed = link_;
  Aggressor aggressor;
  aggressor.name = "neighbour";
  aggressor.spectrum = spectrum_of(0.05 * random_pulse(random_));
  crossed.crosstalk.push_back(aggressor);
  EXPECT_LT(optimum_v(crossed), before_v);
  Link shaken = link_;
  shaken.jitter.dual_dirac_peak_ui = 0.03;
  EXPECT_LE(optimum_v(shaken), before_v + kRoundingV);
}

TEST_P(Property, ALineCodeIsNeverWorseThanIndependentSymbols) {
  link_.signal.levels = 2;
  const double before_v = optimum_v(link_);
  Link coded = link_;
  coded.signal.line_code.kind = LineCodeKind::k8b10b;
  EXPECT_GE(optimum_v(coded), before_v - kRoundingV);
}

TEST_P(Property, ThreadsChangeNoBitOfTheAnswer) {
  const EyeModel model = prepare(link_);
  RunControl two;
  two.num_threads = 2;
  const Solution alone = solve(model);
  const Solution shared = solve(model, {}, two);
  EXPECT_EQ(alone.settings.fir, shared.settings.fir);
  EXPECT_EQ(alone.settings.dfe_v, shared.settings.dfe_v);
  EXPECT_EQ(alone.settings.ctle_index, shared.settings.ctle_index);
  EXPECT_EQ(alone.settings.swing_index, shared.settings.swing_index);
  EXPECT_EQ(alone.settings.phase_samples, shared.settings.phase_samples);
  EXPECT_EQ(alone.score.height.worst_case_v, shared.score.height.worst_case_v);
  EXPECT_EQ(alone.proof.bound_v, shared.proof.bound_v);
}

INSTANTIATE_TEST_SUITE_P(Links, Property, testing::Range(1U, 13U));

}  // namespace
}  // namespace tapwright

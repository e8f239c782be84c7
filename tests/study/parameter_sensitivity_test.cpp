// What the eye does when channel or devices are off, against the same done from scratch.

#include "tapwright/study/parameter_sensitivity.hpp"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>

#include "study/smooth_loss.hpp"
#include "tapwright/base/fft.hpp"
#include "tapwright/eye/score.hpp"

namespace tapwright {
namespace {

LinkSource line_source() {
  return {R"({
    "format": "tapwright.link/1",
    "signal": {"symbol_rate_gbd": 5, "samples_per_ui": 16, "span_ui": [4, 30]},
    "channel": {"line": {"length_m": 2, "loss_db_per_m": [[1, 1.5], [2.5, 2.7]],
                         "delay_ns_per_m": 4.6, "impedance_ohm": 100}},
    "transmitter": {"swing_mvppd": [800], "rise_time_ps": 40,
      "fir": [{"position": 0, "rule": "remainder"},
              {"position": 1, "min": -0.4, "max": 0, "step": 0.025}]},
    "receiver": {"bandwidth_ghz": 3.75,
      "ctle": {"dc_gain_db": [0, -3, -6], "f_z_ghz": 1.25, "poles_ghz": [1.25, 5]},
      "dfe": [{"max_mv": 60}],
      "noise": {"density_v2_per_ghz": 5e-8}},
    "jitter": {"random_ui": 0.01, "dual_dirac_peak_ui": 0.03},
    "target": {"eye_height_mv": 100}
  })", "line", "", {}, std::make_shared<LinkCache>()};
}

Settings some_settings(const EyeModel& model) {
  Settings settings;
  settings.ctle_index = 1;
  settings.fir.resize(2);
  settings.fir << 0.85, -0.15;
  settings.dfe_v.resize(1);
  return readapted(model, settings);
}

class ParameterSensitivityOfALine : public testing::Test {
 protected:
  ParameterSensitivityOfALine()
      : source_(line_source()), model_(prepare(*read_link(source_).value)), settings_(some_settings(model_)) {
    ParameterStudyOptions options;
    options.num_draws = 0;
    options.alternatives = false;
    study_ = parameter_study(model_, source_, settings_, {}, options);
  }

  const ParameterSensitivity& of(const std::string& name) const {
    const auto found = std::find_if(study_.parameters.begin(), study_.parameters.end(),
                                    [&](const auto& p) { return p.parameter.name == name; });
    if (found == study_.parameters.end()) throw std::runtime_error("no " + name);
    return *found;
  }

  /// Change of the eye on a link read from scratch with other numbers.
  StrayedEye from_scratch(const std::vector<LinkChange>& changes) const {
    const EyeModel there = prepare(*read_link(source_, changes).value);
    const double here_v = objective_height_v(model_, settings_);
    return {objective_height_v(there, settings_) - here_v,
            objective_height_v(there, readapted(there, settings_)) - here_v};
  }

  void expect_same(const std::optional<StrayedEye>& found, const std::vector<LinkChange>& changes) {
    ASSERT_TRUE(found);
    const StrayedEye wanted = from_scratch(changes);
    // Rounding: sums of some hundred volts-sized terms; a changed number is written in decimal.
    EXPECT_NEAR(found->fixed_v, wanted.fixed_v, 1e-11);
    EXPECT_NEAR(found->readapted_v, std::max(wanted.readapted_v, wanted.fixed_v), 1e-11);
  }

  LinkSource source_;
  EyeModel model_;
  Settings settings_;
  ParameterStudy study_;
};

TEST_F(ParameterSensitivityOfALine, AgreesWithTheLinkReadFromScratch) {
  expect_same(of("channel length").high, {{"channel.line.length_m", "2.1"}});
  expect_same(of("channel length").low, {{"channel.line.length_m", "1.9"}});
  expect_same(of("channel loss").high, {{"channel.line.loss_db_per_m", "[[1, 1.65], [2.5, 2.97]]"}});
  expect_same(of("line impedance").low, {{"channel.line.impedance_ohm", "90"}});
  expect_same(of("rise time").high, {{"transmitter.rise_time_ps", "44"}});
  expect_same(of("swing").high, {{"transmitter.swing_mvppd", "[840]"}});
  expect_same(of("CTLE gain").low,
              {{"receiver.ctle", R"({"dc_gain_db": [-0.5, -3.5, -6.5], "f_z_ghz": 1.25, "poles_ghz": [1.25, 5]})"}});
  expect_same(of("CTLE poles").high,
              {{"receiver.ctle", R"({"dc_gain_db": [0, -3, -6], "f_z_ghz": 1.25, "poles_ghz": [1.375, 5.5]})"}});
  expect_same(of("receiver noise").high, {{"receiver.noise.density_v2_per_ghz", "7.2e-8"}});  // 1.2^2
  expect_same(of("random jitter").high, {{"jitter.random_ui", "0.012"}});
  expect_same(of("dual-Dirac jitter").low, {{"jitter.dual_dirac_peak_ui", "0.024"}});
}

TEST_F(ParameterSensitivityOfALine, AnOffsetCostsTwiceItself) {
  EXPECT_FALSE(of("slicer offset").low);
  // The eye is twice its narrower half; 2 mV off the middle narrow that by 2 mV.
  EXPECT_NEAR(of("slicer offset").high->fixed_v, -4e-3, 1e-12);
}

TEST_F(ParameterSensitivityOfALine, TheSwingScalesAllButNoise) {
  const Score here = score(model_, settings_);
  // Half eye = swing x (signal - interference - jitter) - Q sigma_receiver; jitter's sigma scales too
  // but adds in squares, so the change lies between 5 % of the eye and 5 % of the eye without noise,
  // provided that the DFE's volts follow the swing, which they can as the tap is far from its limit.
  ASSERT_LT(std::abs(settings_.dfe_v[0]), 0.05);
  const double change_v = of("swing").high->readapted_v;
  EXPECT_GT(change_v, 0.05 * here.height.worst_case_v);
  EXPECT_LT(change_v, 0.05 * (here.height.worst_case_v + 2.0 * here.gaussian_v));
}

TEST_F(ParameterSensitivityOfALine, FollowingNeverCostsMoreThanStayingPut) {
  for (const ParameterSensitivity& p : study_.parameters) {
    for (const auto* side : {&p.low, &p.high}) {
      if (!*side) continue;
      EXPECT_GE((*side)->readapted_v, (*side)->fixed_v) << p.parameter.name;
    }
  }
}

TEST_F(ParameterSensitivityOfALine, TheWordsNameTheDearestParameter) {
  double dearest_v = 0.0;
  std::string name;
  for (const ParameterSensitivity& p : study_.parameters) {
    for (const auto* side : {&p.low, &p.high}) {
      if (*side && -(*side)->readapted_v > dearest_v) {
        dearest_v = -(*side)->readapted_v;
        name = p.parameter.name;
      }
    }
  }
  ASSERT_EQ(study_.sentences.size(), 1u);  // no knobs were given
  EXPECT_NE(study_.sentences[0].find(name), std::string::npos) << study_.sentences[0];
}

TEST_F(ParameterSensitivityOfALine, TheHurtingCornerIsWorseThanAnyParameterAlone) {
  ASSERT_EQ(study_.corners.size(), 2u);
  for (const ParameterSensitivity& p : study_.parameters) {
    EXPECT_LE(study_.corners[0].eye.readapted_v, study_.nominal_v - p.cost_v() + 1e-12);
  }
}

TEST_F(ParameterSensitivityOfALine, ThreadsChangeNoDraw) {
  ParameterStudyOptions options;
  options.num_draws = 12;
  options.alternatives = false;
  RunControl two;
  two.num_threads = 2;
  const auto one_thread = parameter_study(model_, source_, settings_, {}, options);
  const auto two_threads = parameter_study(model_, source_, settings_, {}, options, two);
  ASSERT_TRUE(one_thread.draws && two_threads.draws);
  EXPECT_EQ(one_thread.draws->least_v, two_threads.draws->least_v);
  EXPECT_EQ(one_thread.draws->median_v, two_threads.draws->median_v);
  EXPECT_EQ(one_thread.draws->count, 12);
  options.seed = 2;
  const auto other = parameter_study(model_, source_, settings_, {}, options);
  EXPECT_NE(other.draws->median_v, one_thread.draws->median_v);
}

TEST_F(ParameterSensitivityOfALine, TheRobustSettingsLeastEyeIsAtLeastTheAnswers) {
  ParameterStudyOptions options;
  options.num_draws = 0;
  const Solution best = solve(model_);
  const ParameterStudy study = parameter_study(model_, source_, best.settings, {}, options);
  ASSERT_EQ(study.alternatives.size(), 1u);
  const Alternative& robust = study.alternatives[0];
  EXPECT_LE(robust.height_v, study.nominal_v + 1e-12);  // the answer is the best on the link itself
  EXPECT_LE(robust.least_v, robust.height_v + 1e-12);
  // From scratch, over the link and both corners (the swing's tolerance stays out of this).
  const auto least_of = [&](const Settings& settings) {
    double least_v = objective_height_v(model_, readapted(model_, settings));
    std::vector<Parameter> parameters;
    for (const auto& p : study.parameters) parameters.push_back(p.parameter);
    for (const Corner& corner : study.corners) {
      std::vector<double> strays = corner.strays;
      for (std::size_t i = 0; i < strays.size(); ++i) {
        if (parameters[i].kind == ParameterKind::kSwing) strays[i] = 0.0;
      }
      const EyeModel there = prepare(*strayed_link(model_.link, source_, parameters, strays).value);
      least_v = std::min(least_v, objective_height_v(there, readapted(there, settings)));
    }
    return least_v;
  };
  EXPECT_NEAR(least_of(robust.settings), robust.least_v, 1e-9);
  EXPECT_GE(robust.least_v, least_of(best.settings) - 1e-9);
}

TEST(SmoothLoss, OfALineIsItsLoss) {
  // Matched line: |H| = exp(-(a1 sqrt(f) + a2 f)); 20 log10 e dB a neper.
  const LinkSource source = line_source();
  const Link link = *read_link(source, {{"transmitter", "{}"}}).value;
  const SmoothLoss loss = smooth_loss(link.channel);
  const double at_half_rate_db = (loss.constant + loss.by_sqrt + loss.by_f) * 20.0 / std::log(10.0);
  // 2 m of 2.7 dB/m at 2.5 GHz, half the symbol rate. Method: the line's ends are matched to 100 ohm
  // within what series loss makes of the impedance at low frequency, 0.02 dB here.
  EXPECT_NEAR(at_half_rate_db, 5.4, 0.02);
}

TEST(SmoothLoss, MoreOfItIsALongerLine) {
  const LinkSource source = line_source();
  const Link shorter = *read_link(source).value;
  const Link longer = *read_link(source, {{"channel.line.length_m", "2.1"}}).value;
  const Link bare = *read_link(source, {{"transmitter", "{}"}}).value;
  SmoothLoss more = smooth_loss(bare.channel);
  more.constant *= 0.05;
  more.by_sqrt *= 0.05;
  more.by_f *= 0.05;
  const ReceivedSpectrum stretched = with_more_loss(shorter.channel, more);
  const Eigen::VectorXd a = real_record(stretched.values, stretched.num_samples);
  const Eigen::VectorXd b = real_record(longer.channel.values, longer.channel.num_samples);
  // Same peak to 0.1 % (method: the fit against the line's own law), but for the delay.
  EXPECT_NEAR(a.maxCoeff(), b.maxCoeff(), 1e-3 * b.maxCoeff());
  const Eigen::VectorXd before = real_record(shorter.channel.values, shorter.channel.num_samples);
  EXPECT_LT(a.maxCoeff(), 0.99 * before.maxCoeff());
}

TEST(SmoothLoss, NoneOfItChangesNothing) {
  const Link link = *read_link(line_source()).value;
  EXPECT_EQ(with_more_loss(link.channel, {}).values, link.channel.values);
}

}  // namespace
}  // namespace tapwright

#include "tapwright/study/eye_scan.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <random>

#include "tapwright/base/normal.hpp"
#include "tapwright/eye/placed_eye.hpp"
#include "tapwright/link/read_link.hpp"
#include "tapwright/study/normal_draws.hpp"

namespace tapwright {
namespace {

// A short smooth pulse of 16 samples per UI, so that the counts below are quick.
EyeModel short_model() {
  std::string samples;
  for (int i = 0; i < 16 * 9; ++i) {
    const double t = i / 16.0 - 3.0;
    const double v = 0.6 * std::exp(-t * t / 0.5) + (t > 0 ? 0.08 * t * std::exp(-t / 0.9) : 0.0);
    samples += (i > 0 ? "," : "") + std::to_string(v);
  }
  const auto link = parse_link(R"({"format": "tapwright.link/1", "signal": {"symbol_rate_gbd": 5},
    "channel": {"pulse": {"samples_per_ui": 16, "samples_v": [)" + samples + R"(]}},
    "transmitter": {"swing_mvppd": 1000, "fir": [{"position": 0, "min": 1, "max": 1}]},
    "receiver": {"noise": {"rms_mv": 20}}, "jitter": {"random_ui": 0.02}})", "short.json", "");
  if (!link) throw std::runtime_error(to_string(link.notes.front()));
  return prepare(*link.value);
}

Settings flat(const EyeModel& model) {
  Settings s;
  s.fir = Eigen::VectorXd::Ones(1);
  s.dfe_v = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(model.link.device.receiver.dfe.size()));
  return s;
}

/// Errors of a link with this noise and jitter, symbol by symbol: Monte-Carlo, seeded.
double count_errors(const EyeModel& model, double offset_v, Eigen::Index offset_samples, double noise_v,
                    double jitter_ui, int bits, std::uint64_t stream) {
  const PlacedEye eye = place_eye(model, {0, 0, offset_samples});
  const Eigen::VectorXd q = eye.phases[0].cursors.col(0);
  const Eigen::VectorXd slope = eye.phases[0].jitter.col(0);
  const Eigen::Index main = eye.phases[0].main_index;
  NormalDraws normal(17, stream);
  std::mt19937_64 random(1000 + stream);
  int errors = 0;
  for (int n = 0; n < bits; ++n) {
    const std::uint64_t word = random();
    double y = noise_v * normal.next() - offset_v;
    double jitter_variance = 0.0;
    for (Eigen::Index k = 0; k < q.size(); ++k) {
      y += (word >> k & 1u) != 0 ? q[k] : -q[k];
      jitter_variance += slope[k] * slope[k];
    }
    // Independent Gaussian jitter on every symbol adds up to one Gaussian.
    y += jitter_ui * std::sqrt(jitter_variance) * normal.next();
    errors += ((word >> main & 1u) != 0) != (y > 0.0) ? 1 : 0;
  }
  return errors;
}

TEST(EyeScan, PredictsTheTailOfAPulseWithoutInterference) {
  // One cursor, noise: P = Q((q - v)/sigma) averaged over both symbols.
  const auto link = parse_link(R"({"format": "tapwright.link/1", "signal": {"symbol_rate_gbd": 1},
    "channel": {"pulse": {"samples_v": [0, 0.2, 0], "samples_per_ui": 1}},
    "transmitter": {"swing_mvppd": 2000}, "receiver": {"noise": {"rms_mv": 40}}})", "l", "");
  ASSERT_TRUE(link);
  const EyeModel model = prepare(*link.value);
  const double v = 0.05;
  const double want = 0.5 * (gaussian_tail((0.2 - v) / 0.04) + gaussian_tail((0.2 + v) / 0.04));
  EXPECT_NEAR(predicted_error_ratio(model, flat(model), v, 0.0), want, 1e-5 * want);  // method: 1e-5
}

TEST(EyeScan, GivesBackNoiseAndJitterOfAKnownLink) {
  const EyeModel model = short_model();
  const double noise_v = 0.031;
  const double jitter_ui = 0.045;
  const double gain = 0.93;
  constexpr int kBits = 300000;
  EyeScan scan;
  std::uint64_t stream = 0;
  for (const int phase : {-6, -4, -2, 0, 2, 4, 6}) {
    for (double offset_v = -0.20; offset_v < 0.21; offset_v += 0.05) {
      const double errors = count_errors(model, offset_v / gain, phase, noise_v, jitter_ui, kBits, ++stream);
      scan.points.push_back({offset_v, phase / 16.0, errors, kBits});
    }
  }
  RunControl control;
  control.num_threads = 2;
  const ScanFit fit = fit_scan(model, flat(model), scan, control);
  ASSERT_TRUE(fit.noise_v.standard_error && fit.random_ui.standard_error && fit.gain.standard_error);
  // Statistical: fixed seed, 3 standard errors of the fit itself.
  EXPECT_NEAR(fit.noise_v.value, noise_v, 3.0 * *fit.noise_v.standard_error);
  EXPECT_NEAR(fit.random_ui.value, jitter_ui, 3.0 * *fit.random_ui.standard_error);
  EXPECT_NEAR(fit.gain.value, gain, 3.0 * *fit.gain.standard_error);
  // And the errors are small enough to mean something.
  EXPECT_LT(*fit.noise_v.standard_error, 0.03 * noise_v);
  EXPECT_LT(*fit.random_ui.standard_error, 0.05 * jitter_ui);
  EXPECT_LT(fit.residual, 1.5);
  EXPECT_GT(fit.residual_before, 5.0);
}

TEST(EyeScan, RefusesScansThatTellNothing) {
  const EyeModel model = short_model();
  EXPECT_THROW((void)fit_scan(model, flat(model), {"", {{0.0, 0.0, 0.0, 1e6}}}), std::invalid_argument);
}

TEST(EyeScan, ReadsTablesAndNamesWhatIsWrong) {
  const auto good = parse_eye_scans("offset_mv;phase_ui;errors;bits\n10;0.1;3;1e6\n-10;0.1;4;1e6\n", "scan.csv");
  ASSERT_TRUE(good);
  EXPECT_EQ(good.value->front().points[1].offset_v, -0.01);
  const struct {
    const char* text;
    const char* want;
  } cases[] = {
      {"errors\n1\n", "scan.csv:1: error: column \"bits\" is missing"},
      {"bits\n1\n", "scan.csv:1: error: wanted one of the columns \"errors\" and \"error_ratio\""},
      {"errors,bits,phas_ui\n1,2,3\n", "scan.csv:1: error: column \"phas_ui\" is not known; did you mean \"phase_ui\"?"},
      {"errors,bits\n5,3\n", "scan.csv:2: error: found 5 errors in 3 bits; wanted 0 to as many as the bits"},
      {"errors,bits\nx,3\n", "scan.csv:2: error: column errors: found \"x\", wanted a number"},
      {"errors,bits\n1,3,4\n", "scan.csv:2: error: found 3 cells; the head has 2 columns"},
  };
  for (const auto& c : cases) {
    const auto bad = parse_eye_scans(c.text, "scan.csv");
    EXPECT_FALSE(bad);
    ASSERT_FALSE(bad.notes.empty()) << c.text;
    EXPECT_EQ(to_string(bad.notes.front()), c.want);
  }
}

}  // namespace
}  // namespace tapwright

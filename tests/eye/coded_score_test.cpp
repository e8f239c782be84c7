// Score and bursts of links with a line code.

#include <gtest/gtest.h>

#include <cmath>
#include <numbers>
#include <random>

#include "support/sample_link.hpp"
#include "tapwright/base/normal.hpp"
#include "tapwright/eye/baseline_wander.hpp"
#include "tapwright/eye/error_bursts.hpp"
#include "tapwright/eye/line_code.hpp"
#include "tapwright/eye/score.hpp"

namespace tapwright {
namespace {

using test::link_of_pulse;
using test::plain_settings;

// Checks row 7: the flat tail, through a link: a main cursor of 1 V and 20 cursors of 20 mV.
TEST(CodedScore, AFlatTailUnder8b10bCostsSixCursors) {
  Eigen::VectorXd pulse = Eigen::VectorXd::Constant(21, 0.02);
  pulse[0] = 1.0;
  Link link = link_of_pulse(pulse, 1);
  link.signal.line_code.kind = LineCodeKind::k8b10b;
  const Score s = score(prepare(link), plain_settings(link));
  EXPECT_NEAR(s.isi_v, 6 * 0.02, 1e-12);  // rounding of a transform there and back
  EXPECT_NEAR(s.isi_independent_v, 20 * 0.02, 1e-12);
  EXPECT_NEAR(s.height.worst_case_v, 2 * (1.0 - 0.12), 1e-12);
}

// The sequence in the score, sent through the link's own cursors, opens the eye just as far as the
// score says, for any code; under 8b10b it comes with the names of its characters.
TEST(CodedScore, TheWorstSequenceLeavesTheWorstCase) {
  Eigen::VectorXd pulse(12);
  pulse << 0.02, -0.05, 1.0, 0.21, -0.13, 0.08, 0.06, -0.04, 0.03, 0.02, 0.01, -0.01;
  for (const LineCodeKind kind : {LineCodeKind::kNone, LineCodeKind::k8b10b, LineCodeKind::k64b66b,
                                  LineCodeKind::kManchester}) {
    Link link = link_of_pulse(pulse, 1);
    link.signal.line_code.kind = kind;
    const Score s = score(prepare(link), plain_settings(link));
    double level_v = 0.0;
    for (Eigen::Index k = -2; k < 10; ++k) {
      level_v += pulse[k + 2] * s.worst_sequence[s.worst_sequence_main - k];
    }
    EXPECT_NEAR(2.0 * level_v * s.worst_sequence[s.worst_sequence_main], s.height.worst_case_v,
                1e-12);
    EXPECT_EQ(
        s.worst_characters.size(),
        kind == LineCodeKind::k8b10b ? static_cast<std::size_t>(s.worst_sequence.size() / 10) : 0U);
  }
}

// By hand: w = 0.01, a main cursor of 1 V and no more; see the cases of the wander itself.
TEST(CodedScore, TheWanderOfALinkIsThatOfItsCorner) {
  Link link = link_of_pulse(Eigen::VectorXd::Constant(1, 1.0), 1);
  EXPECT_FALSE(baseline_wander(prepare(link), plain_settings(link)).has_value());
  link.high_pass_hz = 0.01 * link.signal.symbol_rate_bd / (2.0 * std::numbers::pi);
  const auto wander = baseline_wander(prepare(link), plain_settings(link));
  ASSERT_TRUE(wander.has_value());
  EXPECT_NEAR(wander->worst_independent_v, 0.01 / std::expm1(0.01), 1e-12);
  link.high_pass_hz = 1.0;
  EXPECT_FALSE(baseline_wander(prepare(link), plain_settings(link)).has_value());
}

Link noisy_link(LineCodeKind kind) {
  std::mt19937_64 random(41);
  Eigen::VectorXd pulse(40);
  for (Eigen::Index i = 0; i < pulse.size(); ++i) {
    const double u = static_cast<double>(random() >> 11) * 0x1p-52 - 1.0;
    pulse[i] = 0.2 * u / (1.0 + 0.3 * std::abs(static_cast<double>(i) - 5.0));
  }
  pulse[5] = 1.0;
  Link link = link_of_pulse(pulse, 1);
  link.signal.line_code.kind = kind;
  link.device.receiver.noise_rms_v = 0.05;
  link.target.error_ratio = 1e-3;
  return link;
}

// An eye of height E at the error ratio P, offset by E/2 towards the slicer's threshold, makes
// errors at P: counted over an encoded stream with the noise taken exactly. Statistical: 5 sigma
// over batches of 1000 symbols.
TEST(CodedScore, TheEyeAtAnErrorRatioIsWhatAnEncodedStreamLeavesOpen) {
  for (const LineCodeKind kind : {LineCodeKind::k8b10b, LineCodeKind::kManchester}) {
    const Link link = noisy_link(kind);
    const Score s = score(prepare(link), plain_settings(link));
    ASSERT_TRUE(s.height.at_error_ratio_v.has_value());
    const Eigen::VectorXd in_order = s.residual_v.values.reverse();
    const Eigen::Index n = in_order.size();
    const Eigen::Index main_at = n - 1 - s.residual_v.main_index;
    std::mt19937_64 random(42);
    const LineCode code = LineCode::from(link.signal.line_code, 2);
    const Eigen::VectorXd a = random_stream(code, 400000 / code.period(), random);
    std::vector<double> share;
    double sum = 0.0;
    for (Eigen::Index start = 0; start + n <= a.size(); ++start) {
      const double received_v = a[start + main_at] * in_order.dot(a.segment(start, n));
      sum += gaussian_tail((received_v - *s.height.at_error_ratio_v / 2.0) / 0.05);
      if (start % 1000 == 999) {
        share.push_back(sum / 1000.0);
        sum = 0.0;
      }
    }
    double mean = 0.0;
    double square = 0.0;
    const auto count = static_cast<double>(share.size());
    for (const double x : share) mean += x / count;
    for (const double x : share) square += (x - mean) * (x - mean);
    const double deviation = std::sqrt(square) / count;
    EXPECT_NEAR(mean, 1e-3, 5 * deviation);
    EXPECT_LT(deviation, 1e-4);
  }
}

TEST(CodedScore, TheWorstCaseUnderACodeIsNoWorseThanWithout) {
  const Link plain = noisy_link(LineCodeKind::kNone);
  const double without_v = score(prepare(plain), plain_settings(plain)).height.worst_case_v;
  for (const LineCodeKind kind :
       {LineCodeKind::k8b10b, LineCodeKind::k64b66b, LineCodeKind::kManchester}) {
    const Link link = noisy_link(kind);
    const Score s = score(prepare(link), plain_settings(link));
    EXPECT_GE(s.height.worst_case_v, without_v - 1e-12);  // rounding: sums in another order
    EXPECT_GE(*s.height.at_error_ratio_v, s.height.worst_case_v - 1e-9);
  }
}

// With one tap d of the DFE the chance that an error breeds the next is the mean of the tails at
// q +- 2 d (by hand); here nothing but noise disturbs.
TEST(ErrorBurstsOfASetting, FollowItsDfe) {
  Eigen::VectorXd pulse(3);
  pulse << 1.0, 0.4, 0.0;
  Link link = link_of_pulse(pulse, 1);
  link.device.receiver.noise_rms_v = 0.25;
  link.device.receiver.dfe = {{1, 0.5, false, {}}};
  Settings settings = plain_settings(link);
  settings.dfe_v[0] = 0.4;
  const auto bursts = error_bursts(prepare(link), settings);
  ASSERT_TRUE(bursts.has_value());
  const double a = 0.5 * (gaussian_tail(0.2 / 0.25) + gaussian_tail(1.8 / 0.25));
  EXPECT_NEAR(bursts->length_probability[0], 1.0 - a, 1e-5);  // accuracy of the tail
  EXPECT_NEAR(bursts->mean_errors, 1.0 / (1.0 - a), 1e-5);
  EXPECT_NEAR(bursts->start_probability / gaussian_tail(4.0), 1.0, 1e-5);

  link.device.receiver.dfe[0].position = 11;
  EXPECT_FALSE(error_bursts(prepare(link), settings).has_value());
}

}  // namespace
}  // namespace tapwright

#include "tapwright/eye/baseline_wander.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <numbers>
#include <random>
#include <vector>

#include "tapwright/eye/coded_distribution.hpp"

namespace tapwright {
namespace {

const double kUi = 1e-9;
double corner_of(double w) { return w / (2.0 * std::numbers::pi * kUi); }

// By hand: one cursor A leaves the tail -w A e^{-wk}, a geometric series.
TEST(BaselineWander, OfIndependentSymbolsIsTheWholeAmplitudeAtWorst) {
  const double w = 1e-3;
  const Eigen::VectorXd row = Eigen::VectorXd::Constant(1, 0.4);
  const BaselineWander wander = baseline_wander(LineCode::none(), row, 0, corner_of(w), kUi);
  const double decay = std::exp(-w);
  EXPECT_NEAR(wander.worst_independent_v, 0.4 * w * decay / (1 - decay), 1e-12);
  EXPECT_NEAR(wander.rms_independent_v, 0.4 * w * decay / std::sqrt(1 - decay * decay), 1e-12);
  // With no code both ways agree, but for the 1e-4 of the tail that is left out.
  EXPECT_NEAR(wander.worst_v / wander.worst_independent_v, 1.0, 1.1e-4);
  EXPECT_NEAR(wander.rms_v / wander.rms_independent_v, 1.0, 1e-6);
  EXPECT_NEAR(wander.mean_v, 0.0, 1e-15);
}

// Source: digital sum within +-3 (Widmer and Franaszek 1983): a falling tail weighs stretches that
// sum to at most 6 by its steps, which add up to its first entry.
TEST(BaselineWander, Under8b10bStaysBelowSixTails) {
  const double w = 1e-3;
  const Eigen::VectorXd row = Eigen::VectorXd::Constant(1, 0.4);
  const BaselineWander wander = baseline_wander(LineCode::code_8b10b(), row, 0, corner_of(w), kUi);
  EXPECT_LE(wander.worst_v, 6 * 0.4 * w);
  // It can end at 3 after a past that averages 0; 5 % is more than the tail falls over a character.
  EXPECT_GE(wander.worst_v, 0.95 * 3 * 0.4 * w);
  EXPECT_LE(wander.rms_v, 3 * 0.4 * w);
  EXPECT_LT(wander.rms_v, wander.worst_v);
}

// Independent: the high pass itself, stepped exactly over a random stream of rectangular pulses:
// its low-pass state at the middle of a symbol, less that symbol's own half, is the wander.
// Statistical: 5 sigma of the mean square over batches of a thousand symbols; and never above the
// worst case.
TEST(BaselineWander, AgreesWithAFilteredStream) {
  std::mt19937_64 random(31);
  const double w = 5e-3;
  const double amplitude_v = 0.5;
  for (const LineCode& code : {LineCode::none(), LineCode::code_8b10b(), LineCode::manchester()}) {
    const BaselineWander wander =
        baseline_wander(code, Eigen::VectorXd::Constant(1, amplitude_v), 0, corner_of(w), kUi);
    const Eigen::VectorXd a = random_stream(code, 600000 / code.period(), random);
    const double half = std::exp(-w / 2);
    double state_v = 0.0;
    std::vector<double> mean_square;
    double sum = 0.0;
    for (Eigen::Index n = 0; n < a.size(); ++n) {
      const double middle_v = state_v * half;  // without this symbol's own part
      const double end_v = middle_v * half + amplitude_v * a[n] * (1 - half * half);
      state_v = end_v;
      if (n < 4000) continue;  // e^-20 of the start is left
      ASSERT_LE(std::abs(middle_v), wander.worst_v * (1 + 1.1e-4) + 1e-12);
      sum += middle_v * middle_v;
      if (n % 1000 == 999) {
        mean_square.push_back(sum / 1000);
        sum = 0.0;
      }
    }
    double mean = 0.0;
    double square = 0.0;
    const auto count = static_cast<double>(mean_square.size());
    for (const double m : mean_square) mean += m / count;
    for (const double m : mean_square) square += (m - mean) * (m - mean);
    // Neighbouring batches are related over 1/w = 200 symbols: 1.5 covers that.
    const double deviation = 1.5 * std::sqrt(square) / count;
    // The impulse form differs from rectangular pulses by (w/2)^2 / 6 relative.
    EXPECT_NEAR(mean, wander.rms_v * wander.rms_v, 5 * deviation + 1e-6 * mean);
  }
}

// By hand: a machine that sends 1 three times as often as 0 has the mean 0.5, so the tail's sum
// times 0.5 is the shift.
TEST(BaselineWander, OfAnUnbalancedCodeHasAMean) {
  StateMachine machine;
  machine.num_states = 1;
  machine.edges = {{0, 0, {1.0}, 0.75}, {0, 0, {-1.0}, 0.25}};
  const LineCode code = LineCode::machine(machine);
  Eigen::VectorXd row(3);
  row << 0.1, 0.4, 0.05;
  const BaselineWander wander = baseline_wander(code, row, 1, corner_of(2e-3), kUi);
  const double others_v = wander.tail_v.sum() - wander.tail_v[1];
  EXPECT_NEAR(wander.mean_v, 0.5 * others_v, 1e-12);
  EXPECT_LT(wander.mean_v, -0.25);  // nearly the whole DC level 0.5 * 0.55 V
  EXPECT_NEAR(coded_moments(code, row, 1).mean_v, 0.5 * 0.15, 1e-15);
  EXPECT_NEAR(coded_moments(code, row, 1).deviation_v, std::sqrt(0.75 * (0.01 + 0.0025)), 1e-15);
}

TEST(BaselineWander, RefusesACornerOutOfRange) {
  const Eigen::VectorXd row = Eigen::VectorXd::Constant(1, 0.4);
  EXPECT_THROW((void)baseline_wander(LineCode::none(), row, 0, 0.0, kUi), std::invalid_argument);
  EXPECT_THROW((void)baseline_wander(LineCode::none(), row, 0, corner_of(0.2), kUi),
               std::invalid_argument);
  EXPECT_THROW((void)baseline_wander(LineCode::none(), row, 1, corner_of(0.01), kUi),
               std::invalid_argument);
}

}  // namespace
}  // namespace tapwright

#include <gtest/gtest.h>

#include <cmath>

#include "search/random_link.hpp"
#include "tapwright/eye/sampling.hpp"
#include "tapwright/search/solve.hpp"

namespace tapwright {
namespace {

using test::LinkShape;

/// Channels that share the first one's device; the pulses are their own.
std::vector<EyeModel> random_channels(std::mt19937_64& random, const LinkShape& shape, int count) {
  std::vector<EyeModel> models;
  for (int m = 0; m < count; ++m) {
    models.push_back(test::random_model(random, shape));
    models.back().link.device = models.front().link.device;
  }
  return models;
}

/// The least over channels of the best over phases, for every swing, FIR and CTLE setting.
double best_by_enumeration(const std::vector<EyeModel>& models) {
  const FirLimits& fir = models.front().link.device.transmitter.fir;
  double best_v = -std::numeric_limits<double>::infinity();
  std::vector<std::size_t> code(fir.taps.size(), 0);
  for (;;) {
    Settings s;
    s.fir = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(code.size()));
    for (std::size_t i = 0; i < code.size(); ++i) {
      const FirTap& tap = fir.taps[i];
      if (!tap.codes.empty()) s.fir[static_cast<Eigen::Index>(i)] = tap.codes[code[i]].value;
    }
    s.fir = with_remainder(fir, s.fir);
    if (keeps_limits(fir, s.fir)) {
      const std::size_t num_swings = models.front().link.device.transmitter.swings.size();
      for (s.swing_index = 0; s.swing_index < num_swings; ++s.swing_index) {
        for (s.ctle_index = 0; s.ctle_index < models.front().states.size(); ++s.ctle_index) {
          double least_v = std::numeric_limits<double>::infinity();
          for (const EyeModel& model : models) {
            double most_v = -std::numeric_limits<double>::infinity();
            for (const Eigen::Index phase : candidate_phases(model)) {
              s.phase_samples = phase;
              s.dfe_v = settled_dfe(model, s);
              most_v = std::max(most_v, objective_height_v(model, s));
            }
            least_v = std::min(least_v, most_v);
          }
          best_v = std::max(best_v, least_v);
        }
      }
    }
    std::size_t i = 0;
    while (i < code.size() && ++code[i] >= fir.taps[i].codes.size()) {
      code[i] = 0;
      ++i;
    }
    if (i == code.size()) return best_v;
  }
}

// Independent: full enumeration through the eye room's own sum. Tolerance: rounding of some 60 terms
// of at most 1 V, added up in two orders.
TEST(SolveTogether, EqualsFullEnumeration) {
  std::mt19937_64 random(71);
  for (int i = 0; i < 20; ++i) {
    LinkShape shape;
    shape.num_fir = 2 + i % 2;
    shape.num_codes = 9;
    shape.num_dfe = i % 3;
    shape.dfe_codes = i % 4;
    shape.relative_dfe = i % 2 == 0;
    shape.remainder = i % 5 == 4;
    shape.straddle = i % 3 == 1;
    shape.num_swings = 1 + i % 2;
    shape.samples_per_ui = 2 + 2 * (i % 2);
    shape.num_aggressors = i % 7 == 3 ? 1 : 0;
    const std::vector<EyeModel> models = random_channels(random, shape, 2 + i % 3);
    const JointSolution joint = solve_together(models);
    ASSERT_EQ(joint.score_of.size(), models.size());
    EXPECT_EQ(joint.proof.kind, Proof::Kind::kProven) << i << ' ' << joint.proof.reason;
    const double reached_v = joint.score_of[joint.binding_channel].height.worst_case_v;
    EXPECT_NEAR(reached_v, best_by_enumeration(models), 60 * 2.2e-16 * 4.0) << i;
    for (std::size_t m = 0; m < models.size(); ++m) {
      EXPECT_GE(joint.score_of[m].height.worst_case_v, reached_v);
      EXPECT_EQ(joint.settings_of[m].fir, joint.settings.fir);
      EXPECT_EQ(joint.settings_of[m].ctle_index, joint.settings.ctle_index);
    }
  }
}

TEST(SolveTogether, OfOneChannelIsThatChannelsBest) {
  std::mt19937_64 random(73);
  for (const int codes : {0, 12}) {
    LinkShape shape;
    shape.num_codes = codes;
    const std::vector<EyeModel> models = random_channels(random, shape, 1);
    SearchOptions options;
    options.compare = false;
    const Solution alone = solve(models.front(), options);
    const JointSolution joint = solve_together(models);
    // Real taps: both stop within 1e-9 of the optimum.
    EXPECT_NEAR(joint.score_of[0].height.worst_case_v, alone.score.height.worst_case_v,
                1e-9 * std::abs(alone.score.height.worst_case_v));
    EXPECT_EQ(joint.proof.kind, Proof::Kind::kProven);
  }
}

TEST(SolveTogether, IsNeverBetterThanEachChannelAlone) {
  std::mt19937_64 random(79);
  LinkShape shape;
  shape.num_codes = 20;
  const std::vector<EyeModel> models = random_channels(random, shape, 3);
  const JointSolution joint = solve_together(models);
  for (std::size_t m = 0; m < models.size(); ++m) {
    SearchOptions options;
    options.compare = false;
    EXPECT_LE(joint.score_of[m].height.worst_case_v,
              solve(models[m], options).score.height.worst_case_v + 1e-12);
  }
}

TEST(SolveTogether, GivesTheSameAnswerForAnyNumberOfThreads) {
  std::mt19937_64 random(83);
  LinkShape shape;
  shape.num_codes = 16;
  shape.num_states = 9;
  shape.dfe_codes = 5;
  const std::vector<EyeModel> models = random_channels(random, shape, 3);
  RunControl four;
  four.num_threads = 4;
  const JointSolution a = solve_together(models);
  const JointSolution b = solve_together(models, {}, four);
  EXPECT_EQ(a.settings.fir, b.settings.fir);
  EXPECT_EQ(a.proof.num_nodes, b.proof.num_nodes);
  EXPECT_EQ(a.proof.bound_v, b.proof.bound_v);
}

TEST(SolveTogether, SearchesOtherObjectivesWithoutAClaim) {
  std::mt19937_64 random(89);
  LinkShape shape;
  shape.num_codes = 6;
  shape.noise_v = 0.005;
  const std::vector<EyeModel> models = random_channels(random, shape, 2);
  SearchOptions options;
  options.objective = ObjectiveKind::kAtErrorRatio;
  const JointSolution joint = solve_together(models, options);
  EXPECT_EQ(joint.proof.kind, Proof::Kind::kNone);
  const JointSolution worst = solve_together(models);
  const auto least = [](const JointSolution& solution) {
    double least_v = std::numeric_limits<double>::infinity();
    for (const Score& score : solution.score_of) {
      least_v = std::min(least_v, *score.height.at_error_ratio_v);
    }
    return least_v;
  };
  EXPECT_GE(least(joint), least(worst) - 1e-9);
}

TEST(SolveTogether, RefusesChannelsOfDifferentDevices) {
  std::mt19937_64 random(97);
  std::vector<EyeModel> models = random_channels(random, {}, 2);
  models[1].link.device.transmitter.swings.push_back({9, 0.9});
  try {
    (void)solve_together(models);
    FAIL() << "no exception";
  } catch (const std::invalid_argument& error) {
    EXPECT_STREQ(error.what(), "solve_together: channel 2 differs from the first in its swings");
  }
  EXPECT_THROW((void)solve_together({}), std::invalid_argument);
}

}  // namespace
}  // namespace tapwright

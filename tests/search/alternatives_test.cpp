#include "tapwright/search/alternatives.hpp"

#include <gtest/gtest.h>

#include <cmath>

#include "search/random_link.hpp"
#include "tapwright/eye/sampling.hpp"

namespace tapwright {
namespace {

SearchOptions without_comparison() {
  SearchOptions options;
  options.compare = false;
  return options;
}

/// Height at the best phase, DFE settled, by the eye room; -infinity outside the FIR's limits.
double height_of(const EyeModel& model, Settings s) {
  double best_v = -std::numeric_limits<double>::infinity();
  if (!keeps_limits(model.link.device.transmitter.fir, s.fir)) return best_v;
  for (const Eigen::Index phase : candidate_phases(model)) {
    s.phase_samples = phase;
    s.dfe_v = settled_dfe(model, s);
    best_v = std::max(best_v, objective_height_v(model, s));
  }
  return best_v;
}

// Independent: every pair of codes and CTLE states, scored by the eye room. With the whole range
// allowed as loss, the search must find the plateau of them all.
TEST(Alternatives, PlateauIsTheBestOfAllSettings) {
  std::mt19937_64 random(101);
  for (int link = 0; link < 5; ++link) {
    test::LinkShape shape;
    shape.num_fir = 2;
    shape.num_codes = 9;
    shape.num_states = 3;
    shape.dfe_codes = link % 3;
    const EyeModel model = test::random_model(random, shape);
    const std::vector<FirTap>& taps = model.link.device.transmitter.fir.taps;
    const auto at = [&](std::ptrdiff_t pre, std::ptrdiff_t main, std::ptrdiff_t ctle) {
      Settings s;
      s.ctle_index = static_cast<std::size_t>(ctle);
      s.fir = Eigen::Vector2d(taps[0].codes[static_cast<std::size_t>(pre)].value,
                              taps[1].codes[static_cast<std::size_t>(main)].value);
      return height_of(model, s);
    };
    double wanted_v = -std::numeric_limits<double>::infinity();
    for (std::ptrdiff_t pre = 0; pre < 9; ++pre) {
      for (std::ptrdiff_t main = 0; main < 9; ++main) {
        for (std::ptrdiff_t ctle = 0; ctle < 3; ++ctle) {
          double least_v = at(pre, main, ctle);
          if (std::isinf(least_v)) continue;
          const auto look = [&](std::ptrdiff_t a, std::ptrdiff_t b, std::ptrdiff_t c) {
            if (a < 0 || a > 8 || b < 0 || b > 8 || c < 0 || c > 2) return;
            const double near_v = at(a, b, c);
            if (!std::isinf(near_v)) least_v = std::min(least_v, near_v);
          };
          for (std::ptrdiff_t da = -1; da <= 1; ++da) {
            for (std::ptrdiff_t db = -1; db <= 1; ++db) look(pre + da, main + db, ctle);
          }
          look(pre, main, ctle - 1);
          look(pre, main, ctle + 1);
          wanted_v = std::max(wanted_v, least_v);
        }
      }
    }
    const Settings best = solve(model, without_comparison()).settings;
    PlateauOptions options;
    options.loss_v = 10.0;
    const Plateau plateau = plateau_setting(model, best, options);
    EXPECT_TRUE(plateau.complete);
    // Rounding of some 60 terms of at most 1 V, added up in two orders.
    EXPECT_NEAR(plateau.least_v, wanted_v, 60 * 2.2e-16 * 4.0) << link;
    EXPECT_GE(plateau.least_v, plateau.least_at_best_v);
  }
}

TEST(Alternatives, PlateauStaysWithinTheLoss) {
  std::mt19937_64 random(103);
  test::LinkShape shape;
  shape.num_codes = 24;
  const EyeModel model = test::random_model(random, shape);
  const Solution best = solve(model, without_comparison());
  for (const double loss_v : {0.0, 0.001, 0.01}) {
    PlateauOptions options;
    options.loss_v = loss_v;
    const Plateau plateau = plateau_setting(model, best.settings, options);
    EXPECT_GE(plateau.score.height.worst_case_v, best.score.height.worst_case_v - loss_v - 1e-14);
    EXPECT_LE(plateau.least_v, plateau.score.height.worst_case_v + 1e-14);
  }
}

TEST(Alternatives, PlateauSaysWhenItWasCutShort) {
  std::mt19937_64 random(107);
  test::LinkShape shape;
  shape.num_codes = 24;
  const EyeModel model = test::random_model(random, shape);
  PlateauOptions options;
  options.loss_v = 10.0;
  options.max_settings = 1;
  const Settings best = solve(model, without_comparison()).settings;
  EXPECT_FALSE(plateau_setting(model, best, options).complete);
  options.reach_codes = 0;
  EXPECT_THROW((void)plateau_setting(model, best, options), std::invalid_argument);
}

TEST(Alternatives, LeastSwingIsTheFirstThatMeetsTheTarget) {
  std::mt19937_64 random(109);
  test::LinkShape shape;
  shape.num_codes = 9;
  shape.num_swings = 4;
  EyeModel model = test::random_model(random, shape);
  std::vector<double> heights_v;
  for (std::size_t swing = 0; swing < 4; ++swing) {
    SearchOptions options = without_comparison();
    options.swing_index = swing;
    heights_v.push_back(solve(model, options).score.height.worst_case_v);
  }
  ASSERT_LT(heights_v[1], heights_v[2]);
  model.link.target.eye_height_v = 0.5 * (heights_v[1] + heights_v[2]);
  const LeastSwing least = least_swing_setting(model, without_comparison());
  ASSERT_TRUE(least.solution);
  EXPECT_EQ(least.solution->settings.swing_index, 2u);
  EXPECT_EQ(least.tried.size(), 3u);
  model.link.target.eye_height_v = 10.0;
  const LeastSwing none = least_swing_setting(model, without_comparison());
  EXPECT_FALSE(none.solution);
  EXPECT_EQ(none.tried.size(), 4u);
}

}  // namespace
}  // namespace tapwright

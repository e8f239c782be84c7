// Links whose bound comes from the eye room's objective: line codes, masks, heights at an error ratio.

#include <gtest/gtest.h>

#include <cmath>
#include <functional>

#include "search/random_link.hpp"
#include "tapwright/eye/sampling.hpp"
#include "tapwright/search/solve.hpp"

namespace tapwright {
namespace {

using test::LinkShape;

/// Calls `visit` with every setting of FIR codes, CTLE states, phases and DFE codes (or the settled
/// DFE when `settled`).
void for_each_setting(const EyeModel& model, bool settled,
                      const std::function<void(const Settings&)>& visit) {
  const Device& device = model.link.device;
  const FirLimits& fir = device.transmitter.fir;
  std::vector<std::size_t> sizes;
  for (const FirTap& tap : fir.taps) sizes.push_back(tap.codes.size());
  if (!settled) {
    for (const DfeTap& tap : device.receiver.dfe) sizes.push_back(tap.codes.size());
  }
  std::vector<std::size_t> code(sizes.size(), 0);
  for (;;) {
    Settings s;
    s.fir.resize(static_cast<Eigen::Index>(fir.taps.size()));
    for (std::size_t i = 0; i < fir.taps.size(); ++i) {
      s.fir[static_cast<Eigen::Index>(i)] = fir.taps[i].codes[code[i]].value;
    }
    if (keeps_limits(fir, s.fir)) {
      s.dfe_v.resize(static_cast<Eigen::Index>(device.receiver.dfe.size()));
      for (std::size_t i = fir.taps.size(); i < sizes.size(); ++i) {
        const std::size_t d = i - fir.taps.size();
        s.dfe_v[static_cast<Eigen::Index>(d)] = device.receiver.dfe[d].codes[code[i]].value;
      }
      for (s.ctle_index = 0; s.ctle_index < model.states.size(); ++s.ctle_index) {
        for (const Eigen::Index phase : candidate_phases(model)) {
          s.phase_samples = phase;
          if (settled) s.dfe_v = settled_dfe(model, s);
          visit(s);
        }
      }
    }
    std::size_t i = 0;
    while (i < code.size() && ++code[i] >= sizes[i]) {
      code[i] = 0;
      ++i;
    }
    if (i == code.size()) return;
  }
}

double best_by_enumeration(const EyeModel& model, bool settled) {
  double best_v = -std::numeric_limits<double>::infinity();
  for_each_setting(model, settled, [&](const Settings& s) {
    best_v = std::max(best_v, objective_height_v(model, s));
  });
  return best_v;
}

/// Both add up some 60 terms of at most 1 V.
constexpr double kRoundingV = 60 * 2.2e-16 * 4.0;

SearchOptions without_comparison() {
  SearchOptions options;
  options.compare = false;
  return options;
}

TEST(Objectives, ProvesTheBestCodesUnderALineCode) {
  std::mt19937_64 random(51);
  for (int i = 0; i < 6; ++i) {
    LinkShape shape;
    shape.num_fir = 2;
    shape.num_codes = 6;
    shape.num_dfe = i % 3;
    shape.dfe_codes = 2;
    shape.num_states = 1;
    EyeModel model = test::random_model(random, shape);
    model.link.signal.line_code.kind =
        i % 2 == 0 ? LineCodeKind::k8b10b : LineCodeKind::kManchester;
    const Solution solution = solve(model, without_comparison());
    EXPECT_EQ(solution.proof.kind, Proof::Kind::kProven) << i << ' ' << solution.proof.reason;
    EXPECT_NEAR(solution.score.height.worst_case_v, best_by_enumeration(model, false), kRoundingV)
        << i;
  }
}

TEST(Objectives, ProvesTheBestCodesUnderAMask) {
  std::mt19937_64 random(53);
  for (int i = 0; i < 6; ++i) {
    LinkShape shape;
    shape.num_fir = 2;
    shape.num_codes = 6;
    shape.num_dfe = i % 3;
    shape.dfe_codes = 2;
    shape.num_states = 1;
    shape.samples_per_ui = 8;
    EyeModel model = test::random_model(random, shape);
    for (StatePulses& state : model.states) {
      // The random samples have no width; a triangle of one UI either side does.
      const PulseResponse narrow = state.victim;
      Eigen::VectorXd wide = Eigen::VectorXd::Zero(narrow.size());
      for (Eigen::Index t = 0; t < wide.size(); ++t) {
        for (Eigen::Index d = -7; d <= 7; ++d) {
          wide[t] += narrow.at(t + d) * (1.0 - std::abs(static_cast<double>(d)) / 8.0) *
                     ((t + d) % 8 == 0 ? 1.0 : 0.0);
        }
      }
      state.victim = PulseResponse(wide, 8, narrow.ui_s());
    }
    model.link.mask_width_ui = 0.25;
    const Solution solution = solve(model, without_comparison());
    EXPECT_EQ(solution.proof.kind, Proof::Kind::kProven) << i << ' ' << solution.proof.reason;
    EXPECT_NEAR(solution.score.height.worst_case_v, best_by_enumeration(model, false), kRoundingV)
        << i;
  }
}

TEST(Objectives, FindsTheBestCodesAtAnErrorRatioAndNeverBoundsBelowThem) {
  std::mt19937_64 random(57);
  for (int i = 0; i < 4; ++i) {
    LinkShape shape;
    shape.num_fir = 2;
    shape.num_codes = 6;
    shape.num_dfe = 1;
    shape.dfe_codes = 3;
    shape.num_states = 1;
    shape.noise_v = 0.004;
    shape.levels = i % 2 == 0 ? 2 : 4;
    EyeModel model = test::random_model(random, shape);
    model.link.objective = ObjectiveKind::kAtErrorRatio;
    const Solution solution = solve(model, without_comparison());
    const double best_v = best_by_enumeration(model, true);
    ASSERT_NE(solution.proof.kind, Proof::Kind::kNone);
    EXPECT_GE(solution.proof.bound_v, best_v - kRoundingV);
    // exceeded_level_v: 1e-6 of N or 10 uV, twice.
    EXPECT_NEAR(*solution.score.height.at_error_ratio_v, best_v, 4e-5) << i;
  }
}

TEST(Objectives, ClaimsNothingWhereNoBoundIsKnown) {
  std::mt19937_64 random(59);
  LinkShape shape;
  shape.num_fir = 2;
  shape.num_codes = 5;
  shape.num_dfe = 0;
  shape.num_states = 1;
  shape.noise_v = 0.004;
  EyeModel model = test::random_model(random, shape);
  model.link.objective = ObjectiveKind::kAtErrorRatio;
  model.link.signal.line_code.kind = LineCodeKind::kManchester;
  const Solution solution = solve(model, without_comparison());
  EXPECT_EQ(solution.proof.kind, Proof::Kind::kNone);
  EXPECT_EQ(solution.proof.reason, "no bound is known for this objective on this link");
  EXPECT_NEAR(*solution.score.height.at_error_ratio_v, best_by_enumeration(model, true), 1e-3);
}

TEST(Objectives, UsesTheObjectiveThatTheOptionsName) {
  std::mt19937_64 random(61);
  LinkShape shape;
  shape.num_codes = 5;
  shape.num_states = 1;
  shape.noise_v = 0.01;
  const EyeModel model = test::random_model(random, shape);
  SearchOptions options = without_comparison();
  options.objective = ObjectiveKind::kAtErrorRatio;
  const Solution by_ratio = solve(model, options);
  const Solution by_worst = solve(model, without_comparison());
  EXPECT_GE(*by_ratio.score.height.at_error_ratio_v, *by_worst.score.height.at_error_ratio_v - 4e-5);
  EXPECT_LE(by_ratio.score.height.worst_case_v, by_worst.score.height.worst_case_v + 1e-12);
}

}  // namespace
}  // namespace tapwright

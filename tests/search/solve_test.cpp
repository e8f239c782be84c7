#include "tapwright/search/solve.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <fstream>
#include <nlohmann/json.hpp>

#include "search/random_link.hpp"
#include "support/python.hpp"
#include "tapwright/eye/sampling.hpp"
#include "tapwright/search/certificate.hpp"

namespace tapwright {
namespace {

using test::LinkShape;

/// Every code of every knob at every candidate phase, scored by the eye room.
double best_by_enumeration(const EyeModel& model) {
  const FirLimits& fir = model.link.device.transmitter.fir;
  const std::optional<double> limit_v = model.link.device.receiver.peak_input_v;
  double best_v = -std::numeric_limits<double>::infinity();
  std::vector<std::size_t> code(fir.taps.size(), 0);
  for (;;) {
    Settings s;
    s.fir.resize(static_cast<Eigen::Index>(code.size()));
    for (std::size_t i = 0; i < code.size(); ++i) {
      const FirTap& tap = fir.taps[i];
      s.fir[static_cast<Eigen::Index>(i)] = tap.codes.empty() ? 0.0 : tap.codes[code[i]].value;
    }
    s.fir = with_remainder(fir, s.fir);
    if (keeps_limits(fir, s.fir)) {
      const double peak_v = peak_input_v(fir, s.fir, model.input);
      for (s.swing_index = 0; s.swing_index < model.link.device.transmitter.swings.size();
           ++s.swing_index) {
        const double amplitude_v = model.link.device.transmitter.swings[s.swing_index].value;
        if (limit_v && peak_v * amplitude_v > *limit_v) continue;
        for (s.ctle_index = 0; s.ctle_index < model.states.size(); ++s.ctle_index) {
          std::vector<Eigen::Index> phases = candidate_phases(model);
          if (model.link.sampling != SamplingRule::kBest) {
            phases = {sampling_instant(model, s, model.link.sampling).phase_samples};
          }
          for (const Eigen::Index phase : phases) {
            s.phase_samples = phase;
            s.dfe_v = settled_dfe(model, s);
            best_v = std::max(best_v, objective_height_v(model, s));
          }
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

/// Rounding: two ways to add up some 60 terms of at most 1 V.
constexpr double kRoundingV = 60 * 2.2e-16 * 4.0;

void expect_best(const EyeModel& model, const std::string& what) {
  SCOPED_TRACE(what);
  SearchOptions options;
  options.certificate = true;
  options.compare = false;
  const Solution solution = solve(model, options);
  const double best_v = best_by_enumeration(model);
  EXPECT_EQ(solution.proof.kind, Proof::Kind::kProven) << solution.proof.reason;
  EXPECT_NEAR(solution.score.height.worst_case_v, best_v, kRoundingV);
  EXPECT_EQ(solution.proof.gap_v, 0.0);
  ASSERT_TRUE(solution.certificate);
  const CertificateCheck check = check_certificate(model, *solution.certificate);
  EXPECT_TRUE(check.holds) << check.reason;
  EXPECT_NEAR(check.bound_v, best_v, 1e-12);  // rounding of the stored weights
}

// Independent: full enumeration through the eye room's own sum.
TEST(Solve, EqualsFullEnumerationOnFiftySmallLinks) {
  std::mt19937_64 random(1);
  for (int i = 0; i < 50; ++i) {
    LinkShape shape;
    shape.num_fir = 2 + i % 3;
    shape.num_codes = shape.num_fir == 4 ? 5 : 9;
    shape.num_dfe = i % 4;
    shape.levels = i % 2 == 0 ? 2 : 4;
    shape.relative_dfe = i % 3 == 0;
    shape.dfe_codes = i % 5 == 0 ? 0 : 1 + i % 6;
    shape.remainder = i % 7 == 3;
    shape.straddle = i % 4 == 1;
    shape.uneven_codes = i % 6 == 2;
    shape.num_swings = 1 + i % 2;
    shape.noise_v = i % 3 == 1 ? 0.001 : 0.0;
    shape.num_aggressors = i % 8 == 5 ? 2 : 0;
    EyeModel model = test::random_model(random, shape);
    if (i % 9 == 4) {  // a peak-input limit that binds
      const double top_v = model.link.device.transmitter.swings.back().value;
      model.link.device.receiver.peak_input_v = 0.8 * top_v * model.input.samples_v().lpNorm<1>() /
                                                model.input.samples_per_ui();
    }
    if (i % 10 == 7) {
      model.link.device.transmitter.snr_db = 30.0;
      if (!shape.remainder) model.link.device.transmitter.fir.min_main = 0.6;
    }
    expect_best(model, "link " + std::to_string(i));
  }
}

TEST(Solve, EqualsEnumerationWhereTheClockFollowsTheTaps) {
  std::mt19937_64 random(2);
  for (int i = 0; i < 10; ++i) {
    LinkShape shape;
    shape.samples_per_ui = 4;
    shape.num_codes = 7;
    shape.num_dfe = 1 + i % 2;
    shape.dfe_codes = i % 3;
    EyeModel model = test::random_model(random, shape);
    model.link.sampling = SamplingRule::kMuellerMuller;
    expect_best(model, "link " + std::to_string(i));
  }
}

TEST(Solve, EqualsEnumerationWithJitter) {
  std::mt19937_64 random(3);
  for (int i = 0; i < 8; ++i) {
    LinkShape shape;
    shape.samples_per_ui = 8;
    shape.num_codes = 6;
    shape.dfe_codes = i % 2 == 0 ? 0 : 4;
    shape.noise_v = 0.0005;
    EyeModel model = test::random_model(random, shape);
    model.link.jitter.random_ui = 0.002;
    model.link.jitter.dual_dirac_peak_ui = i % 3 == 0 ? 0.0 : 0.005;
    expect_best(model, "link " + std::to_string(i));
  }
}

nlohmann::json to_json(const Eigen::VectorXd& v) {
  return std::vector<double>(v.begin(), v.end());
}

/// What the outside script needs: cursors per state and phase, and the limits.
nlohmann::json problem_of(const EyeModel& model) {
  nlohmann::json rows = nlohmann::json::array();
  for (std::size_t s = 0; s < model.states.size(); ++s) {
    for (const Eigen::Index phase : candidate_phases(model)) {
      const CursorRow row = victim_row(model, s, phase);
      rows.push_back({{"values", to_json(row.values)}, {"main", row.main_index}});
    }
  }
  nlohmann::json taps = nlohmann::json::array();
  for (const FirTap& tap : model.link.device.transmitter.fir.taps) {
    std::vector<double> codes;
    for (const Code& code : tap.codes) codes.push_back(code.value);
    taps.push_back(
        {{"position", tap.position}, {"min", tap.min}, {"max", tap.max}, {"codes", codes}});
  }
  nlohmann::json dfe = nlohmann::json::array();
  for (const DfeTap& tap : model.link.device.receiver.dfe) {
    dfe.push_back({{"position", tap.position}, {"max", tap.max}, {"relative", tap.relative}});
  }
  return {{"rows", rows},
          {"taps", taps},
          {"dfe", dfe},
          {"peak_limit", model.link.device.transmitter.fir.peak_limit},
          {"amplitude_v", model.link.device.transmitter.swings.front().value},
          {"levels", model.link.signal.levels}};
}

// Source: HiGHS through scipy.optimize (checks.md row 5), one program a phase.
// Tolerance: checks.md row 5, 1e-9 relative.
TEST(Solve, EqualsHighsOnTwoHundredRandomLinks) {
  if (!test::has_scipy()) GTEST_SKIP() << "needs python3-scipy";
  std::mt19937_64 random(5);
  nlohmann::json problems = nlohmann::json::array();
  std::vector<double> heights_v;
  for (int i = 0; i < 200; ++i) {
    LinkShape shape;
    shape.samples_per_ui = 1;
    shape.num_states = 1;
    shape.num_fir = 3 + i % 3;
    shape.num_dfe = i % 6;
    shape.levels = (i / 2) % 2 == 0 ? 2 : 4;
    shape.relative_dfe = (i / 3) % 2 == 0;
    shape.num_codes = i % 2 == 0 ? 0 : 9 + i % 8;
    shape.straddle = (i / 5) % 2 == 0;
    const EyeModel model = test::random_model(random, shape);
    SearchOptions options;
    options.certificate = true;
    options.compare = false;
    const Solution solution = solve(model, options);
    EXPECT_EQ(solution.proof.kind, Proof::Kind::kProven) << "link " << i;
    const CertificateCheck check = check_certificate(model, *solution.certificate);
    EXPECT_TRUE(check.holds) << "link " << i << ": " << check.reason;
    heights_v.push_back(solution.score.height.worst_case_v);
    problems.push_back(problem_of(model));
  }
  const std::string path = testing::TempDir() + "tapwright_search_links.json";
  std::ofstream(path) << problems;
  const auto reference = test::run_python("tests/outside/worst_case_optimum.py", "'" + path + "'");
  ASSERT_TRUE(reference);
  ASSERT_EQ(reference->size(), heights_v.size());
  for (std::size_t i = 0; i < heights_v.size(); ++i) {
    const double wanted_v = (*reference)[i].get<double>();
    EXPECT_NEAR(heights_v[i], wanted_v, 1e-9 * std::abs(wanted_v)) << "link " << i;
  }
}

TEST(Solve, GivesTheSameBytesForAnyNumberOfThreads) {
  std::mt19937_64 random(7);
  LinkShape shape;
  shape.num_fir = 4;
  shape.num_codes = 24;
  shape.dfe_codes = 6;
  shape.samples_per_ui = 8;
  shape.num_states = 12;
  shape.num_swings = 2;
  const EyeModel model = test::random_model(random, shape);
  RunControl one;
  RunControl four;
  four.num_threads = 4;
  const Solution a = solve(model, {}, one);
  const Solution b = solve(model, {}, four);
  EXPECT_EQ(a.settings.fir, b.settings.fir);
  EXPECT_EQ(a.settings.dfe_v, b.settings.dfe_v);
  EXPECT_EQ(a.settings.phase_samples, b.settings.phase_samples);
  EXPECT_EQ(a.proof.num_nodes, b.proof.num_nodes);
  EXPECT_EQ(a.proof.num_settings, b.proof.num_settings);
  EXPECT_EQ(a.proof.bound_v, b.proof.bound_v);
}

TEST(Solve, SaysBoundedWithAnHonestGapWhenStoppedByTheNodeLimit) {
  std::mt19937_64 random(11);
  LinkShape shape;
  shape.num_fir = 5;
  shape.num_codes = 30;
  shape.dfe_codes = 3;
  const EyeModel model = test::random_model(random, shape);
  SearchOptions few;
  few.max_nodes = 0;
  const Solution bounded = solve(model, few);
  const Solution proven = solve(model);
  ASSERT_EQ(bounded.proof.kind, Proof::Kind::kBounded);
  ASSERT_EQ(proven.proof.kind, Proof::Kind::kProven);
  EXPECT_GT(bounded.proof.gap_v, 0.0);
  EXPECT_GE(bounded.proof.bound_v, proven.score.height.worst_case_v);
  EXPECT_NEAR(bounded.proof.bound_v - bounded.proof.gap_v, bounded.score.height.worst_case_v, 1e-15);
}

TEST(Solve, KeepsTheKnobsItIsToldToKeep) {
  std::mt19937_64 random(13);
  LinkShape shape;
  shape.num_codes = 9;
  shape.num_swings = 2;
  const EyeModel model = test::random_model(random, shape);
  SearchOptions options;
  options.swing_index = 0;
  options.ctle_index = 1;
  options.fir = Eigen::Vector3d(-0.05, 0.8, -0.11);
  const Solution solution = solve(model, options);
  EXPECT_EQ(solution.settings.swing_index, 0u);
  EXPECT_EQ(solution.settings.ctle_index, 1u);
  EXPECT_EQ(solution.settings.fir, *options.fir);
  EXPECT_EQ(solution.proof.kind, Proof::Kind::kProven);
}

TEST(Solve, RefusesAKnobValueThatTheDeviceDoesNotHave) {
  std::mt19937_64 random(17);
  const EyeModel model = test::random_model(random, {});
  SearchOptions options;
  options.swing_index = 5;
  try {
    (void)solve(model, options);
    FAIL() << "no exception";
  } catch (const std::invalid_argument& error) {
    EXPECT_STREQ(error.what(), "solve: swing 5 of 1");
  }
  options.swing_index.reset();
  options.fir = Eigen::VectorXd::Zero(2);
  try {
    (void)solve(model, options);
    FAIL() << "no exception";
  } catch (const std::invalid_argument& error) {
    EXPECT_STREQ(error.what(), "solve: found 2 FIR tap values for 3 taps");
  }
}

// checks.md row 4b, derivation: a one-pole channel sampled at the end of each UI has the cursors
// A (1 - e^-x) e^(-kx), x = T/tau. Without taps the eye is 2A(1 - 2e^-x); with one post-cursor tap
// under the peak limit c0 - c1 = 1, cancelling all ISI, it is 2A tanh(x/2). Tolerance: the cursors
// left out beyond 60 UI (e^-60x) and rounding.
TEST(Solve, MeetsTheClosedFormOfAOnePoleChannel) {
  for (const double x : {0.9, 1.2, 2.0}) {
    Eigen::VectorXd pulse = Eigen::VectorXd::Zero(66);
    for (int k = 0; k < 60; ++k) pulse[3 + k] = (1.0 - std::exp(-x)) * std::exp(-k * x);
    EyeModel model{Link{}, {}, PulseResponse(pulse, 1, 1e-10), {3, 60}, 0.0, "as given", {}};
    model.link.samples_per_ui = 1;
    model.link.device.transmitter.swings = {{0, 0.4}};
    model.states.push_back({PulseResponse(pulse, 1, 1e-10), {}, 0.0});
    model.link.device.receiver.ctle.push_back({0, "flat", CtleReference{}, std::nullopt});
    model.link.device.transmitter.fir.taps = {{0, 1.0, 1.0, {}, false}};
    EXPECT_NEAR(solve(model).score.height.worst_case_v, 0.8 * (1.0 - 2.0 * std::exp(-x)), 1e-14);
    model.link.device.transmitter.fir.taps = {{0, 0.0, 1.0, {}, false}, {1, -1.0, 0.0, {}, false}};
    EXPECT_NEAR(solve(model).score.height.worst_case_v, 0.8 * std::tanh(x / 2.0), 1e-12);
  }
}

}  // namespace
}  // namespace tapwright

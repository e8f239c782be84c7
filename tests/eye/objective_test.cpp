#include "tapwright/eye/objective.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <random>
#include <string>

#include "support/sample_link.hpp"
#include "tapwright/eye/score.hpp"

namespace tapwright {
namespace {

using test::fir_tap;

/// A link with everything in it: jitter, noise, mask, an aggressor, a DFE tap beyond the span.
Link full_link(std::mt19937_64& random) {
  std::uniform_real_distribution<double> uniform(-1.0, 1.0);
  constexpr int kPerUi = 8;
  Eigen::VectorXd p(20 * kPerUi);
  Eigen::VectorXd x(20 * kPerUi);
  for (Eigen::Index i = 0; i < p.size(); ++i) {
    const double t = (static_cast<double>(i) - 3.0 * kPerUi) / kPerUi;
    p[i] = std::exp(-t * t) + 0.08 * uniform(random);
    x[i] = 0.02 * uniform(random);
  }
  Link link = test::link_of_pulse(p, kPerUi);
  link.signal.span_ui = {3, 10};
  link.device.transmitter.swings = {{0, 0.4}};
  link.device.transmitter.fir.taps = {fir_tap(-1, -0.3, 0.3), fir_tap(0, 0.4, 1.0),
                                      fir_tap(1, -0.3, 0.3)};
  link.device.transmitter.snr_db = 33.0;
  link.device.receiver.dfe = {{1, 0.1, false, {}}, {2, 0.1, false, {}}, {14, 0.1, false, {}}};
  link.device.receiver.noise_rms_v = 2e-3;
  link.device.receiver.sensitivity_v = 1e-3;
  link.jitter.random_ui = 0.01;
  link.jitter.dual_dirac_peak_ui = 0.02;
  link.target.error_ratio = 1e-9;
  Aggressor neighbour;
  neighbour.spectrum = test::spectrum_of(x, kPerUi, link.signal.ui_s());
  link.crosstalk = {neighbour};
  return link;
}

Eigen::VectorXd random_point(std::mt19937_64& random) {
  std::uniform_real_distribution<double> uniform(-1.0, 1.0);
  Eigen::VectorXd x(6);
  x << 0.15 * uniform(random), 0.8 + 0.1 * uniform(random), 0.15 * uniform(random),
      0.03 * uniform(random), 0.03 * uniform(random), 0.01 * uniform(random);
  return x;
}

Settings settings_at(const Eigen::VectorXd& x, const Place& place) {
  return {place.swing_index, x.head(3), place.ctle_index, x.tail(3), place.phase_samples};
}

struct Case {
  std::string name;
  int levels = 2;
  LineCodeKind code = LineCodeKind::kNone;
  double mask_ui = 0.0;
};

class ObjectiveOf : public testing::TestWithParam<Case> {
 protected:
  EyeModel model(std::mt19937_64& random) const {
    Link link = full_link(random);
    link.signal.levels = GetParam().levels;
    link.signal.line_code.kind = GetParam().code;
    link.mask_width_ui = GetParam().mask_ui;
    return prepare(link);
  }
  Place place_{0, 0, 1};
};

TEST_P(ObjectiveOf, IsTheScore) {
  std::mt19937_64 random(1);
  const EyeModel m = model(random);
  const Eigen::VectorXd x = random_point(random);
  const Score s = score(m, settings_at(x, place_));
  Eigen::VectorXd gradient;
  // Rounding: the same sums in another order.
  for (Eigen::VectorXd* g : {static_cast<Eigen::VectorXd*>(nullptr), &gradient}) {
    EXPECT_NEAR(objective_at(m, ObjectiveKind::kWorstCase, place_).value_v(x, g),
                s.height.worst_case_v, 1e-13);
    EXPECT_NEAR(objective_at(m, ObjectiveKind::kAtErrorRatio, place_).value_v(x, g),
                *s.height.at_error_ratio_v, 1e-9);
  }
  ASSERT_EQ(gradient.size(), 6);
}

TEST_P(ObjectiveOf, WorstCaseIsConcaveWithItsSupergradient) {
  std::mt19937_64 random(2);
  const EyeModel m = model(random);
  const Objective objective = objective_at(m, ObjectiveKind::kWorstCase, place_);
  ASSERT_TRUE(objective.is_concave);
  for (int trial = 0; trial < 30; ++trial) {
    const Eigen::VectorXd a = random_point(random);
    const Eigen::VectorXd b = random_point(random);
    Eigen::VectorXd gradient;
    const double at_a = objective.value_v(a, &gradient);
    const double at_b = objective.value_v(b, nullptr);
    EXPECT_LE(at_b, at_a + gradient.dot(b - a) + 1e-12) << "rounding only";
    EXPECT_GE(objective.value_v(0.5 * (a + b), nullptr), 0.5 * (at_a + at_b) - 1e-12);
  }
}

TEST_P(ObjectiveOf, GradientAtTheErrorRatioIsThatOfDifferences) {
  std::mt19937_64 random(3);
  const EyeModel m = model(random);
  const Objective objective = objective_at(m, ObjectiveKind::kAtErrorRatio, place_);
  for (int trial = 0; trial < 5; ++trial) {
    const Eigen::VectorXd x = random_point(random);
    Eigen::VectorXd gradient;
    (void)objective.value_v(x, &gradient);
    for (Eigen::Index i = 0; i < x.size(); ++i) {
      const auto difference = [&](double h) {
        Eigen::VectorXd moved = x;
        moved[i] = x[i] + h;
        const double up_v = objective.value_v(moved, nullptr);
        moved[i] = x[i] - h;
        return (up_v - objective.value_v(moved, nullptr)) / (2.0 * h);
      };
      // Method: central differences err by h^2, seen from two steps; N(P) itself by 1e-8 V / h.
      // Under a mask a difference may straddle a change of the least phase: then the two disagree.
      const double coarse = difference(1e-4);
      const double fine = difference(5e-5);
      EXPECT_NEAR(gradient[i], fine, std::abs(coarse - fine) + 1e-3) << "x[" << i << "]";
    }
  }
}

TEST_P(ObjectiveOf, BoundAtTheErrorRatioIsConcaveAndNeverBelow) {
  std::mt19937_64 random(4);
  const EyeModel m = model(random);
  const Objective objective = objective_at(m, ObjectiveKind::kAtErrorRatio, place_);
  ASSERT_FALSE(objective.is_concave);
  if (!objective.upper_bound_v) {
    EXPECT_NE(GetParam().code, LineCodeKind::kNone);
    return;
  }
  for (int trial = 0; trial < 30; ++trial) {
    const Eigen::VectorXd a = random_point(random);
    const Eigen::VectorXd b = random_point(random);
    Eigen::VectorXd gradient;
    const double at_a = objective.upper_bound_v(a, &gradient);
    EXPECT_GE(at_a, objective.value_v(a, nullptr) - 1e-9);
    EXPECT_LE(objective.upper_bound_v(b, nullptr), at_a + gradient.dot(b - a) + 1e-12);
  }
}

INSTANTIATE_TEST_SUITE_P(Links, ObjectiveOf,
                         testing::Values(Case{"two_levels"}, Case{"four_levels", 4},
                                         Case{"masked", 2, LineCodeKind::kNone, 0.5},
                                         Case{"coded", 2, LineCodeKind::k8b10b}),
                         [](const auto& sample) { return sample.param.name; });

}  // namespace
}  // namespace tapwright

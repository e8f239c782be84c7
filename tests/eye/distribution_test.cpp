#include "tapwright/eye/distribution.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <numbers>
#include <random>
#include <vector>

#include "support/python.hpp"
#include "tapwright/base/normal.hpp"

namespace tapwright {
namespace {

Eigen::VectorXd vector_of(const nlohmann::json& list) {
  const auto values = list.get<std::vector<double>>();
  return Eigen::Map<const Eigen::VectorXd>(values.data(), static_cast<Eigen::Index>(values.size()));
}

Disturbance random_disturbance(std::mt19937_64& random, Eigen::Index num, double sigma_v) {
  std::uniform_real_distribution<double> uniform(-1.0, 1.0);
  Disturbance d;
  d.symbols_v.resize(num);
  for (Eigen::Index k = 0; k < num; ++k) {
    d.symbols_v[k] = 0.03 * uniform(random) * std::exp(-static_cast<double>(k) / 20.0);
  }
  d.sigma_v = sigma_v;
  return d;
}

// checks.md row 6. Source: numpy's convolution of the lattice of the sum, Gaussian in closed form
// (tests/outside/distribution_reference.py). Also the hard case of 40 equal cursors in little
// noise.
TEST(Distribution, AgreesWithNumpysConvolution) {
  if (!test::has_scipy()) GTEST_SKIP() << "numpy and scipy are not here";
  const auto cases = test::run_python("tests/outside/distribution_reference.py");
  ASSERT_TRUE(cases.has_value());
  ASSERT_GE(cases->size(), 40u);
  for (const auto& c : *cases) {
    Disturbance d;
    d.symbols_v = vector_of(c["symbols_v"]);
    d.binary_v = vector_of(c["binary_v"]);
    d.levels = c["levels"];
    d.sigma_v = c["sigma_v"];
    const double probability = c["probability"];
    const double level_v = c["level_v"];
    const std::string name = c["name"].get<std::string>() + " at " + c["probability"].dump();
    // Method: the documented error of the fast evaluation. (Wanted: 0.1 % or 0.1 mV.)
    const double fast_v = exceeded_level_v(d, probability);
    EXPECT_NEAR(fast_v, level_v, std::max(1e-6 * level_v, 1e-7)) << name;
    EXPECT_NEAR(exceedance(d, level_v) / probability, 1.0, 1e-4) << name;

    // Method: splitting adds a variance of at most step^2 / 4 per amplitude, which moves the level
    // by theta K step^2 / 8 with theta <= Q / sigma; the bins' width by up to a step.
    const double step_v = 20e-6;
    const GridDistribution grid = grid_distribution(d, step_v);
    const double count = static_cast<double>(d.levels / 2 * d.symbols_v.size() + d.binary_v.size());
    const double theta = gaussian_quantile_of_tail(probability) / d.sigma_v;
    EXPECT_NEAR(grid.exceeded_level_v(probability), level_v,
                theta * count * step_v * step_v / 8.0 + step_v)
        << name;
  }
}

TEST(Distribution, FastAndGridStayTogetherOnRandomSums) {
  std::mt19937_64 random(60);
  for (int trial = 0; trial < 60; ++trial) {
    Disturbance d = random_disturbance(random, 5 + 3 * trial, trial % 2 == 0 ? 5e-4 : 5e-3);
    d.levels = trial % 3 == 0 ? 4 : 2;
    if (trial % 4 == 0) d.binary_v = 0.1 * d.symbols_v;
    const double probability = std::pow(10.0, -3.0 - trial % 16);
    const double step_v = 10e-6;
    const double grid_v = grid_distribution(d, step_v).exceeded_level_v(probability);
    const double fast_v = exceeded_level_v(d, probability);
    // What issue and docstring promise: 0.1 % or 0.1 mV; here a tenth of it.
    EXPECT_NEAR(fast_v, grid_v, std::max(1e-4 * grid_v, 1e-5)) << trial;
    EXPECT_LE(fast_v, d.worst_v() + gaussian_quantile_of_tail(probability) * d.sigma_v + 1e-9);
  }
}

// With little or no noise the fast evaluation works on a slightly wider sum and carries the result
// back; with amplitudes on a lattice that must not wash the steps out.
TEST(Distribution, FastAndGridStayTogetherInLittleNoise) {
  std::mt19937_64 random(61);
  for (int trial = 0; trial < 36; ++trial) {
    Disturbance d = random_disturbance(random, 30 + 4 * trial, 0.0);
    d.levels = trial % 6 == 0 ? 4 : 2;
    if (trial % 3 == 0) {
      const double lattice_v = 3e-4 * (1 + trial % 7);
      d.symbols_v = (d.symbols_v / lattice_v).array().round() * lattice_v;
    }
    const double sigmas_v[] = {0.0, 1e-6, 1e-5, 1e-4};
    d.sigma_v = sigmas_v[trial % 4];
    const double probability = std::pow(10.0, -3.0 - trial % 10);
    const double grid_v = grid_distribution(d, 5e-6).exceeded_level_v(probability);
    // Wanted: 0.1 % or 0.1 mV; here a tenth of it, or two steps of the grid.
    EXPECT_NEAR(exceeded_level_v(d, probability), grid_v, std::max(1e-4 * grid_v, 1e-5)) << trial;
  }
}

// checks.md row 6. 1e8 symbols, each with neighbours and noise of its own, so that the counts are
// binomial: the interval is 4 standard deviations (a seed fixed once, a fault seen 1 in 15000).
TEST(Distribution, AgreesWithACountOfSymbols) {
  constexpr int kCursors = 20;
  constexpr long kSymbols = 100'000'000;
  std::mt19937_64 random(20240606);
  Disturbance d = random_disturbance(random, kCursors, 4e-3);
  const double probabilities[] = {1e-2, 1e-4, 1e-6};
  double levels_v[3];
  for (int i = 0; i < 3; ++i) levels_v[i] = exceeded_level_v(d, probabilities[i]);

  // The sum over ten cursors for each pattern of ten symbols.
  std::vector<double> sum_v[2];
  for (int half = 0; half < 2; ++half) {
    for (unsigned bits = 0; bits < 1024; ++bits) {
      double sum = 0.0;
      for (int k = 0; k < 10; ++k) {
        sum += ((bits >> k) & 1u) != 0 ? d.symbols_v[half * 10 + k] : -d.symbols_v[half * 10 + k];
      }
      sum_v[half].push_back(sum);
    }
  }
  long counts[3] = {};
  for (long n = 0; n < kSymbols; n += 2) {
    // Two Gaussians a time (Box and Muller 1958).
    const auto bits = random();
    const double u = (static_cast<double>(random() >> 11) + 0.5) * 0x1p-53;
    const double v = static_cast<double>(random() >> 11) * 0x1p-53;
    const double radius = d.sigma_v * std::sqrt(-2.0 * std::log(u));
    const double angle = 2.0 * std::numbers::pi * v;
    const double x[2] = {
        sum_v[0][bits & 1023] + sum_v[1][(bits >> 10) & 1023] + radius * std::cos(angle),
        sum_v[0][(bits >> 20) & 1023] + sum_v[1][(bits >> 30) & 1023] + radius * std::sin(angle)};
    for (const double value : x) {
      if (value <= levels_v[0]) continue;
      ++counts[0];
      if (value > levels_v[1]) ++counts[1];
      if (value > levels_v[2]) ++counts[2];
    }
  }
  for (int i = 0; i < 3; ++i) {
    const double expected = probabilities[i] * kSymbols;
    EXPECT_NEAR(static_cast<double>(counts[i]), expected, 4.0 * std::sqrt(expected))
        << "at " << probabilities[i];
  }
}

TEST(Distribution, GivesAGaussianItsQuantileAndTail) {
  Disturbance d;
  d.sigma_v = 2e-3;
  for (const double probability : {1e-3, 1e-12, 1e-18}) {
    const double level_v = 2e-3 * gaussian_quantile_of_tail(probability);
    EXPECT_NEAR(exceeded_level_v(d, probability), level_v, 1e-6 * level_v) << "method";
    EXPECT_NEAR(exceedance(d, level_v) / probability, 1.0, 1e-5) << "method";
  }
  EXPECT_NEAR(exceedance(d, 0.0), 0.5, 1e-6);
  EXPECT_NEAR(exceedance(d, -2e-3), 1.0 - gaussian_tail(1.0), 1e-6);
}

// Exact: with n equal cursors and no noise every sequence has probability 2^-n.
TEST(Distribution, EndsAtTheWorstCaseWithoutNoise) {
  Disturbance d;
  d.symbols_v = Eigen::VectorXd::Constant(8, 0.01);
  EXPECT_NEAR(exceeded_level_v(d, 1e-3), 0.08, 1e-5) << "2^-8 > 1e-3; within one grid step";
  EXPECT_NEAR(exceeded_level_v(d, 1e-12), 0.08, 1e-5);
  EXPECT_EQ(exceedance(d, 0.081), 0.0);
  EXPECT_EQ(exceeded_level_v(Disturbance{}, 1e-6), 0.0) << "nothing disturbs";
}

TEST(Distribution, RefusesAProbabilityThatIsNoTail) {
  for (const double probability : {0.0, 0.5, -1.0, std::nan("")}) {
    EXPECT_THROW((void)exceeded_level_v(Disturbance{}, probability), std::invalid_argument);
  }
  Disturbance three;
  three.symbols_v = Eigen::VectorXd::Constant(1, 0.1);
  three.levels = 3;
  EXPECT_THROW((void)exceeded_level_v(three, 1e-6), std::invalid_argument);
  EXPECT_THROW((void)grid_distribution(Disturbance{}, 0.0), std::invalid_argument);
}

}  // namespace
}  // namespace tapwright

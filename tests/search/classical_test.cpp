#include "tapwright/search/classical.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <nlohmann/json.hpp>

#include "search/random_link.hpp"
#include "support/python.hpp"

namespace tapwright {
namespace {

CursorRow row_of(std::vector<double> values, Eigen::Index main) {
  return {Eigen::Map<Eigen::VectorXd>(values.data(), static_cast<Eigen::Index>(values.size())), main};
}

Eigen::VectorXd vector_of(const nlohmann::json& list) {
  const auto values = list.get<std::vector<double>>();
  return Eigen::Map<const Eigen::VectorXd>(values.data(), static_cast<Eigen::Index>(values.size()));
}

// Source: numpy.linalg.solve and scipy.optimize on the channels of Proakis, Digital Communications
// (checks.md row 3), in the script. Tolerances: rounding, n eps times the condition of the
// equations, for zero forcing; the outside optimizer's own 1e-7 for least squares.
TEST(Classical, EqualsNumpyAndScipyOnProakisChannels) {
  if (!test::has_scipy()) GTEST_SKIP() << "needs python3-scipy";
  const auto reference = test::run_python("tests/outside/classical_taps.py");
  ASSERT_TRUE(reference);
  ASSERT_GE(reference->size(), 4u);
  for (const nlohmann::json& item : *reference) {
    const auto positions = item["positions"].get<std::vector<int>>();
    const auto dfe = item["dfe"].get<std::vector<int>>();
    const CursorRow row =
        row_of(item["p"].get<std::vector<double>>(), item["main"].get<Eigen::Index>());
    const auto forced = zero_forcing_taps(positions, dfe, row);
    ASSERT_TRUE(forced);
    const Eigen::VectorXd wanted = vector_of(item["zero_forcing"]);
    const double tolerance = static_cast<double>(positions.size()) * 2.2e-16 *
                             item["condition"].get<double>() * wanted.norm();
    EXPECT_LT((*forced - wanted).norm(), tolerance);
    const LeastSquares found = least_squares_taps(positions, dfe, row, item["symbol_variance"],
                                                  item["noise"], item["peak_limit"]);
    EXPECT_NEAR(found.mean_square, item["mean_square"].get<double>(), 1e-7);
    EXPECT_LE(found.mean_square, item["mean_square"].get<double>() + 1e-10);
  }
}

// Lucky's theorem (1965; checks.md row 4): with q_0 = 1 and an open initial eye, zero forcing at the
// taps' own positions minimises the sum of |q_k| over the others. Independent: any other taps.
TEST(Classical, ZeroForcingMinimisesTheDistortionOfAnOpenEye) {
  std::mt19937_64 random(31);
  for (int link = 0; link < 20; ++link) {
    std::vector<double> p(9);
    double sum = 0.0;
    for (std::size_t k = 0; k < p.size(); ++k) {
      p[k] = test::uniform(random, -1.0, 1.0);
      sum += std::abs(p[k]);
    }
    for (double& value : p) value *= 0.8 / sum;  // |others| < 0.8 < p_0: open
    p[4] = 1.0;
    const CursorRow row = row_of(p, 4);
    const std::vector<int> positions = {-1, 0, 1, 2};
    const auto forced = zero_forcing_taps(positions, {}, row);
    ASSERT_TRUE(forced);
    const auto distortion = [&](Eigen::VectorXd taps) {
      const auto cursor = [&](int k) {
        double q = 0.0;
        for (std::size_t i = 0; i < positions.size(); ++i) {
          q += taps[static_cast<Eigen::Index>(i)] * row.at(k - positions[i]);
        }
        return q;
      };
      const double main = cursor(0);
      double rest = 0.0;
      for (int k = -5; k <= 6; ++k) rest += k == 0 ? 0.0 : std::abs(cursor(k));
      return rest / main;
    };
    const double least = distortion(*forced);
    for (int i = 0; i < 500; ++i) {
      Eigen::VectorXd other = *forced;
      const double size = std::pow(10.0, test::uniform(random, -5.0, 0.0));
      for (double& tap : other) tap += size * test::uniform(random, -0.3, 0.3);
      EXPECT_GE(distortion(other), least - 1e-14);
    }
  }
}

TEST(Classical, ZeroForcingLeavesTheDfeItsOwnCursors) {
  const CursorRow row = row_of({0.05, 1.0, 0.4, 0.2, 0.1}, 1);
  const auto taps = zero_forcing_taps({-1, 0, 1}, {1, 2}, row);
  ASSERT_TRUE(taps);
  const auto cursor = [&](int k) {
    return (*taps)[0] * row.at(k + 1) + (*taps)[1] * row.at(k) + (*taps)[2] * row.at(k - 1);
  };
  EXPECT_NEAR(cursor(0), 1.0, 1e-15);
  EXPECT_NEAR(cursor(-1), 0.0, 1e-15);
  EXPECT_NEAR(cursor(3), 0.0, 1e-15);  // 1 and 2 are the DFE's
}

TEST(Classical, LeastSquaresKeepsTapsAtZeroThatTheNoiseDoesNotPayFor) {
  const CursorRow row = row_of({0.01, 1.0, 0.3}, 1);
  const LeastSquares noisy = least_squares_taps({-1, 0, 1}, {}, row, 1.0, 0.5, 1.0);
  EXPECT_EQ(noisy.taps[0], 0.0);
  const LeastSquares quiet = least_squares_taps({-1, 0, 1}, {}, row, 1.0, 0.0, 1.0);
  EXPECT_NE(quiet.taps[0], 0.0);
}

TEST(Classical, RoundsTapsToCodesThatKeepEveryLimit) {
  std::mt19937_64 random(37);
  for (int i = 0; i < 200; ++i) {
    test::LinkShape shape;
    shape.num_fir = 2 + i % 4;
    shape.num_codes = 5 + i % 20;
    shape.remainder = i % 3 == 0;
    shape.straddle = i % 2 == 0;
    const EyeModel model = test::random_model(random, shape);
    const FirLimits& limits = model.link.device.transmitter.fir;
    Eigen::VectorXd taps(shape.num_fir);
    for (double& tap : taps) tap = test::uniform(random, -0.3, 0.3);
    taps[static_cast<Eigen::Index>(limits.main_index())] = 1.0;
    const auto codes = to_codes(limits, taps);
    ASSERT_TRUE(codes) << i;
    EXPECT_TRUE(keeps_limits(limits, *codes));
  }
}

TEST(Classical, ScoresEachMethodOnTheLink) {
  std::mt19937_64 random(41);
  test::LinkShape shape;
  shape.num_codes = 20;
  shape.noise_v = 0.002;
  const EyeModel model = test::random_model(random, shape);
  const std::vector<Compared> methods = classical_methods(model);
  ASSERT_EQ(methods.size(), 3u);
  EXPECT_EQ(methods[0].name, "no equalization");
  EXPECT_EQ(methods[1].name, "zero forcing");
  EXPECT_EQ(methods[2].name, "MMSE");
  for (const Compared& method : methods) {
    ASSERT_TRUE(method.score) << method.name << method.note;
    EXPECT_EQ(method.score->height.worst_case_v, score(model, *method.settings).height.worst_case_v);
    EXPECT_TRUE(keeps_limits(model.link.device.transmitter.fir, method.settings->fir));
  }
}

}  // namespace
}  // namespace tapwright

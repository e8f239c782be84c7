#include "tapwright/eye/error_bursts.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <random>
#include <vector>

#include "tapwright/base/normal.hpp"

namespace tapwright {
namespace {

// By hand: with one tap the next decision is wrong with probability a = (F(q + 2d) + F(q - 2d)) / 2
// whatever the sign of the first, so lengths are geometric.
TEST(ErrorBursts, OfOneTapAreGeometric) {
  const auto tail = [](double x) { return gaussian_tail(x / 0.1); };
  const double a = 0.5 * (tail(0.3 + 0.4) + tail(0.3 - 0.4));
  const ErrorBursts bursts = error_bursts(tail, 0.3, Eigen::VectorXd::Constant(1, 0.2), 5);
  for (int n = 1; n <= 5; ++n) {
    EXPECT_NEAR(bursts.length_probability[n - 1], std::pow(a, n - 1) * (1 - a), 1e-14);
  }
  EXPECT_NEAR(bursts.longer_probability, std::pow(a, 5), 1e-14);
  EXPECT_NEAR(bursts.mean_length, 1 / (1 - a), 1e-12);
  EXPECT_NEAR(bursts.mean_errors, 1 / (1 - a), 1e-12);
  EXPECT_NEAR(bursts.error_ratio, tail(0.3) / (1 - a), 1e-12);
}

// Source: common practice: with a tap as large as the main cursor, and little noise, a wrong
// decision makes the next one wrong with probability one half.
TEST(ErrorBursts, OfATapAsLargeAsTheMainCursorGoOnWithOneHalf) {
  const auto tail = [](double x) { return gaussian_tail(x / 0.01); };
  const ErrorBursts bursts = error_bursts(tail, 0.3, Eigen::VectorXd::Constant(1, 0.3));
  EXPECT_NEAR(bursts.length_probability[0], 0.5, 1e-12);
  EXPECT_NEAR(bursts.length_probability[1], 0.25, 1e-12);
}

TEST(ErrorBursts, WithoutFeedbackAreSingleErrors) {
  const auto tail = [](double x) { return gaussian_tail(x / 0.1); };
  const ErrorBursts none = error_bursts(tail, 0.3, Eigen::VectorXd());
  EXPECT_EQ(none.length_probability[0], 1.0);
  EXPECT_EQ(none.error_ratio, tail(0.3));
}

// Independent: a slicer with feedback fed random symbols and noise. Statistical: 5 sigma of a
// binomial count; seeded.
TEST(ErrorBursts, AgreeWithASimulatedReceiver) {
  const Eigen::Vector3d dfe_v(0.12, -0.07, 0.05);
  const double main_v = 0.3;
  const double sigma_v = 0.12;
  const ErrorBursts bursts =
      error_bursts([&](double x) { return gaussian_tail(x / sigma_v); }, main_v, dfe_v, 40);
  EXPECT_NEAR(bursts.length_probability.sum() + bursts.longer_probability, 1.0, 1e-12);

  std::mt19937_64 random(21);
  const auto uniform = [&] { return (static_cast<double>(random() >> 11) + 0.5) * 0x1p-53; };
  const auto normal = [&] { return gaussian_quantile_of_tail(uniform()); };
  std::vector<long> length_count(41, 0);
  long num_bursts = 0;
  long num_errors = 0;
  const long num_symbols = 4000000;
  int wrong[3] = {0, 0, 0};  // decided minus sent, over 2, of the last three
  long first = -1;
  long last = -1;
  for (long n = 0; n < num_symbols; ++n) {
    const double sent = (random() >> 63) != 0U ? 1.0 : -1.0;
    double level_v = main_v * sent + sigma_v * normal();
    for (int k = 0; k < 3; ++k) level_v -= 2.0 * dfe_v[k] * wrong[k];
    const double decided = level_v > 0.0 ? 1.0 : -1.0;
    wrong[2] = wrong[1];
    wrong[1] = wrong[0];
    wrong[0] = static_cast<int>((decided - sent) / 2.0);
    if (wrong[0] != 0) {
      ++num_errors;
      if (first < 0) first = n;
      last = n;
    } else if (first >= 0 && n - last == 3) {
      ++num_bursts;
      ++length_count[static_cast<std::size_t>(std::min(last - first, 40L))];
      first = -1;
    }
  }
  ASSERT_GT(num_bursts, 10000);
  for (int n = 0; n < 12; ++n) {
    const double p = bursts.length_probability[n];
    const double deviation = std::sqrt(p * (1 - p) / static_cast<double>(num_bursts));
    EXPECT_NEAR(static_cast<double>(length_count[static_cast<std::size_t>(n)]) /
                    static_cast<double>(num_bursts),
                p, 5 * deviation)
        << n + 1;
  }
  // A burst starts only among the symbols that stand after correct ones; here a few percent don't.
  const double errors_per_burst = static_cast<double>(num_errors) / static_cast<double>(num_bursts);
  EXPECT_NEAR(errors_per_burst, bursts.mean_errors, 0.03);
}

// Many taps take the tail from nodes: 3^7 sums. Method: straight lines in ln P over 513 nodes;
// here ln P is a parabola, whose chord error is (step / sigma)^2 / 8.
TEST(ErrorBursts, OfManyTapsComeCloseToTheExactTail) {
  const double sigma_v = 0.1;
  const auto tail = [&](double x) { return gaussian_tail(x / sigma_v); };
  Eigen::VectorXd dfe_v(7);
  dfe_v << 0.1, 0.031, -0.023, 0.017, 0.011, -0.007, 0.005;
  const ErrorBursts many = error_bursts(tail, 0.4, dfe_v);
  const double step = 4 * dfe_v.lpNorm<1>() / 512;
  // A chain of one error more needs the exact tail at one sum only: P(length 1) by hand.
  double clear = 1.0;
  for (int k = 0; k < 7; ++k) {
    clear *= 1.0 - 0.5 * (tail(0.4 - 2 * dfe_v[k]) + tail(0.4 + 2 * dfe_v[k]));
  }
  EXPECT_NEAR(many.length_probability[0], clear, std::pow(step / sigma_v, 2) / 8);
  EXPECT_NEAR(many.length_probability.sum() + many.longer_probability, 1.0, 1e-12);
}

TEST(ErrorBursts, RefuseTooManyTapsAndWhatIsNoProbability) {
  const auto tail = [](double x) { return gaussian_tail(x); };
  EXPECT_THROW((void)error_bursts(tail, 1.0, Eigen::VectorXd::Zero(11)), std::invalid_argument);
  EXPECT_THROW((void)error_bursts(tail, 1.0, Eigen::VectorXd::Zero(1), 0), std::invalid_argument);
  EXPECT_THROW(
      (void)error_bursts([](double) { return 1.5; }, 1.0, Eigen::VectorXd::Constant(1, 0.1)),
      std::invalid_argument);
}

}  // namespace
}  // namespace tapwright

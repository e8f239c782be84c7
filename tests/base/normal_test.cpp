#include "tapwright/base/normal.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <numbers>
#include <stdexcept>

namespace tapwright {
namespace {

// Source: tables of the normal distribution and the T11 jitter methodology's total-jitter factors
// (both from memory; the closed tail integral below re-derives them).
// Tolerance: the tables are rounded to the last printed digit.
TEST(Normal, GivesTheQuantilesOfTheTables) {
  EXPECT_NEAR(gaussian_quantile_of_tail(1e-12), 7.0345, 5e-5);
  EXPECT_NEAR(gaussian_quantile_of_tail(1e-15), 7.9413, 5e-5);
  const double total_jitter_factor[] = {12.723, 13.412, 14.069, 14.698, 15.301, 15.883};
  for (int i = 0; i < 6; ++i) {
    EXPECT_NEAR(2.0 * gaussian_quantile_of_tail(std::pow(10.0, -10 - i)), total_jitter_factor[i],
                5.1e-4);
  }
}

// Independent: numerical integration of the density (Simpson, 20000 steps over 12 sigma), whose
// method error at this step is below 1e-12 relative.
TEST(Normal, TailEqualsTheIntegralOfTheDensity) {
  for (const double x : {0.0, 1.0, 3.0, 7.0345}) {
    const int steps = 20000;
    const double h = 12.0 / steps;
    double sum = 0.0;
    for (int i = 0; i <= steps; ++i) {
      const double t = x + i * h;
      const double weight = (i == 0 || i == steps) ? 1.0 : (i % 2 == 1 ? 4.0 : 2.0);
      sum += weight * std::exp(-0.5 * t * t);
    }
    const double integral = sum * h / 3.0 / std::sqrt(2.0 * std::numbers::pi);
    EXPECT_NEAR(gaussian_tail(x) / integral, 1.0, 1e-10);
  }
}

TEST(Normal, RefusesAProbabilityOutsideTheOpenInterval) {
  EXPECT_THROW((void)gaussian_quantile_of_tail(0.0), std::invalid_argument);
  EXPECT_THROW((void)gaussian_quantile_of_tail(1.0), std::invalid_argument);
}

}  // namespace
}  // namespace tapwright

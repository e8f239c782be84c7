#include "tapwright/base/fft.hpp"

#include <gtest/gtest.h>

#include <numbers>
#include <random>

namespace tapwright {
namespace {

// Independent: the defining sum. Tolerance: rounding, n * eps * sum |x|.
TEST(Fft, EqualsTheDefiningSumForAnyLength) {
  std::mt19937_64 random(7);
  for (const int n : {1, 2, 3, 4, 6, 15, 30, 64, 90}) {
    Eigen::VectorXd x(n);
    for (int i = 0; i < n; ++i) x[i] = static_cast<double>(random() >> 11) * 0x1p-53 - 0.5;
    const Eigen::VectorXcd spectrum = real_spectrum(x);
    ASSERT_EQ(spectrum.size(), n / 2 + 1);
    const double tolerance = n * 2.3e-16 * x.lpNorm<1>() * 4;
    for (int k = 0; k < spectrum.size(); ++k) {
      std::complex<double> sum = 0.0;
      for (int i = 0; i < n; ++i) sum += x[i] * std::polar(1.0, -2 * std::numbers::pi * k * i / n);
      EXPECT_NEAR(std::abs(spectrum[k] - sum), 0.0, tolerance) << n << " " << k;
    }
    EXPECT_LE((real_record(spectrum, n) - x).lpNorm<Eigen::Infinity>(), tolerance) << n;
  }
}

TEST(Fft, OneTransformServesManyRecords) {
  for (const int n : {1, 2, 15, 64}) {
    RecordTransform transform(n);
    const Eigen::VectorXd first = Eigen::VectorXd::LinSpaced(n, -1.0, 2.0);
    const Eigen::VectorXd second = first.cwiseAbs2();
    for (const Eigen::VectorXd& x : {first, second, first}) {
      const Eigen::VectorXd back = transform.record(real_spectrum(x));
      // Rounding: n * eps * sum |x|.
      EXPECT_LE((back - x).lpNorm<Eigen::Infinity>(), n * 2.3e-16 * x.lpNorm<1>() * 4) << n;
    }
  }
  RecordTransform transform(8);
  EXPECT_THROW((void)transform.record(Eigen::VectorXcd::Zero(4)), std::invalid_argument);
}

TEST(Fft, QuickSizesHoldNoPrimeAboveFive) {
  EXPECT_EQ(quick_transform_size(1), 1);
  EXPECT_EQ(quick_transform_size(7), 8);
  EXPECT_EQ(quick_transform_size(1031), 1080);
}

}  // namespace
}  // namespace tapwright

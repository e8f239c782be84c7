#pragma once
// How often a sum of independent symbols and noise exceeds a level.

#include <Eigen/Core>

namespace tapwright {

/// X = sum_k symbols_v[k] a_k + sum_k binary_v[k] b_k + sigma_v Z with independent a_k (levels
/// evenly spaced over [-1, 1], equally likely), b_k = +-1 (equally likely) and Z standard normal.
struct Disturbance {
  Eigen::VectorXd symbols_v;
  Eigen::VectorXd binary_v;
  double sigma_v = 0.0;
  int levels = 2;

  /// The largest value of the part without Gaussian tail.
  [[nodiscard]] double worst_v() const { return symbols_v.lpNorm<1>() + binary_v.lpNorm<1>(); }
};

/// N(P): the level that X exceeds with probability `probability`, one side.
///
/// Method: cumulant function, Newton for the saddle point, tail by the trapezoid rule on the
///         vertical line through it; the grid where noise is too little for that.
/// Units:  volts. Errors: std::invalid_argument unless 0 < probability < 0.5.
/// Limits: within 1e-6 of N or 10 uV of the exact value, whichever is larger.
[[nodiscard]] double exceeded_level_v(const Disturbance& disturbance, double probability);

/// N(P) with its derivatives by each amplitude and by sigma.
struct ExceededLevel {
  double level_v = 0.0;
  Eigen::VectorXd by_symbols;  ///< dN / d symbols_v[k] = E[a_k | X = N]
  Eigen::VectorXd by_binary;
  double by_sigma = 0.0;
};
[[nodiscard]] ExceededLevel exceeded_level_with_gradient(const Disturbance& disturbance,
                                                         double probability);

/// P(X > level_v), relative accuracy 1e-5 or better where the contour serves.
[[nodiscard]] double exceedance(const Disturbance& disturbance, double level_v);

/// The distribution on a grid by direct convolution; each amplitude is split over the two nearest
/// bins so that the mean stays. The split adds variance, so that levels come out too large by up to
/// theta K step^2 / 8 (theta the saddle point), besides up to a step where the tail is a staircase.
struct GridDistribution {
  double step_v = 0.0;
  Eigen::Index zero_index = 0;  ///< bin of 0 V
  Eigen::VectorXd mass;         ///< probability of bin i: around (i - zero_index) step_v
  Eigen::VectorXd tail;         ///< P(X > lower edge of bin i)

  [[nodiscard]] double exceedance(double level_v) const;  ///< ln P interpolated
  [[nodiscard]] double exceeded_level_v(double probability) const;
};
[[nodiscard]] GridDistribution grid_distribution(const Disturbance& disturbance, double step_v);

}  // namespace tapwright

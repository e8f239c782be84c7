#pragma once
// The distribution of a sum of independent +-b_k and Gaussian noise, seen along a vertical line
// Re z = theta: what N(P), exceedance and the whole eye are computed from.

#include <cmath>
#include <complex>
#include <optional>
#include <vector>

#include "tapwright/eye/distribution.hpp"

namespace tapwright {

/// An evenly spaced symbol of L = 2^n levels over [-1, 1] is a sum of n independent +-: weights
/// 2^(n-1), ..., 2, 1 over L - 1. So a disturbance is a list of +-, in a fixed order.
[[nodiscard]] std::vector<double> binary_amplitudes(const Disturbance& disturbance);
/// Derivatives by those amplitudes put back to the terms they came from; level and by_sigma are 0.
[[nodiscard]] ExceededLevel gathered(const Disturbance& disturbance,
                                     const std::vector<double>& by_amplitude);

/// K(z) = sum ln cosh(z b_k) + sigma^2 z^2 / 2 of X = sum +-b_k + sigma Z.
class Cumulant {
 public:
  Cumulant(std::vector<double> amplitudes_v, double sigma_v);
  explicit Cumulant(const Disturbance& disturbance);

  /// K, K' and K'' at a real theta >= 0.
  struct At {
    double k = 0.0;
    double k1 = 0.0;
    double k2 = 0.0;
  };
  [[nodiscard]] At at(double theta) const;
  /// theta with theta K' - K = q^2 / 2, to about 1e-6; empty when the sum is too bounded for one.
  [[nodiscard]] std::optional<double> theta_of_quantile(double q) const;
  /// theta with K' = x, x > 0; empty when x lies too far beyond the largest value.
  [[nodiscard]] std::optional<double> theta_of_level(double x) const;

  [[nodiscard]] const std::vector<double>& amplitudes_v() const { return amplitudes_v_; }
  [[nodiscard]] double sigma_v() const { return sigma_v_; }
  [[nodiscard]] double variance_v2() const { return power_sums_.front().p2 + sigma_v_ * sigma_v_; }
  [[nodiscard]] double worst_v() const { return worst_v_; }
  /// Without noise every sequence is at least this likely, so nothing rarer than `probability` lies
  /// below the worst case.
  [[nodiscard]] bool is_certain(double probability) const {
    return sigma_v_ == 0.0 && amplitudes_v_.size() < 1000 &&
           std::ldexp(probability, static_cast<int>(amplitudes_v_.size())) <= 1.0;
  }

  /// Sums of b^2, b^4 ... b^10 over the amplitudes from an index on.
  struct PowerSums {
    double p2 = 0.0, p4 = 0.0, p6 = 0.0, p8 = 0.0, p10 = 0.0;
  };
  /// Index from which on |z| b < kSmall, where the power series of ln cosh serves.
  [[nodiscard]] std::size_t first_small(double abs_z) const;
  [[nodiscard]] const PowerSums& power_sums(std::size_t from) const { return power_sums_[from]; }

 private:
  std::vector<double> amplitudes_v_;   // descending, positive
  std::vector<PowerSums> power_sums_;  // one more than amplitudes
  double sigma_v_ = 0.0;
  double worst_v_ = 0.0;
};

/// The values e^(K(z_j) - K(theta)) at z_j = theta + i j step, j = 0 ... n - 1, far enough out that
/// what follows is below 1e-9 of the first.
class TailContour {
 public:
  /// `period` is 2 pi / step, in volts: the trapezoid rule repeats the tilted distribution at that
  /// distance. Empty when more than max_points would be needed.
  [[nodiscard]] static std::optional<TailContour> along(const Cumulant& cumulant, double theta,
                                                        double period_v, int max_points);
  /// The period that keeps repetitions below about 1e-6 of P near probability P.
  [[nodiscard]] static double period_for(double theta, const Cumulant::At& at, double probability);

  [[nodiscard]] double exceedance(double x) const;
  [[nodiscard]] double density(double x) const;
  /// x with exceedance(x) = probability, from a start near it.
  [[nodiscard]] double level_of(double probability, double start_v) const;
  /// dN / d sigma^2 at x = N.
  [[nodiscard]] double by_variance(double x) const;
  /// E[b-sign of amplitude b | X = x] for each amplitude, and the derivative by sigma.
  void gradient(double x, const std::vector<double>& amplitudes_v, double sigma_v,
                std::vector<double>& by_amplitude, double& by_sigma) const;

  [[nodiscard]] double theta() const { return theta_; }
  [[nodiscard]] double step() const { return step_; }
  [[nodiscard]] double k() const { return k_; }
  [[nodiscard]] const std::vector<double>& real() const { return real_; }
  [[nodiscard]] const std::vector<double>& imag() const { return imag_; }

 private:
  struct Sums {
    double over_z = 0.0;
    double plain = 0.0;
  };
  [[nodiscard]] Sums sums(double x) const;

  double theta_ = 0.0;
  double step_ = 0.0;
  double k_ = 0.0;
  std::vector<double> real_;
  std::vector<double> imag_;
};

/// As grid_distribution of the disturbance that the cumulant stands for.
[[nodiscard]] GridDistribution grid_distribution(const Cumulant& cumulant, double step_v);

}  // namespace tapwright

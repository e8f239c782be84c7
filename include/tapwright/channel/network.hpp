#pragma once
// S-parameters of an n-port over a frequency grid.

#include <Eigen/Core>
#include <complex>

namespace tapwright {

/// Scattering matrices with their reference impedances.
///
/// Shape:  frequencies_hz is (num_points), rising, >= 0; values is (n * n, num_points), column k
///         the matrix S at point k, column-major; reference_ohm is (n), real parts > 0.
/// Units:  hertz, ohms. S is in power waves (Kurokawa 1965); for real references these are the
///         usual travelling waves divided by the square root of the reference.
struct Network {
  Eigen::VectorXd frequencies_hz;
  Eigen::MatrixXcd values;
  Eigen::VectorXcd reference_ohm;

  [[nodiscard]] int num_ports() const { return static_cast<int>(reference_ohm.size()); }
  [[nodiscard]] Eigen::Index num_points() const { return frequencies_hz.size(); }
  /// S at one point, (n, n); row = port the wave leaves, column = port it enters.
  [[nodiscard]] Eigen::Map<const Eigen::MatrixXcd> at(Eigen::Index point) const {
    return {values.col(point).data(), num_ports(), num_ports()};
  }
  [[nodiscard]] Eigen::Map<Eigen::MatrixXcd> at(Eigen::Index point) {
    return {values.col(point).data(), num_ports(), num_ports()};
  }
  /// One parameter over all points, (num_points); ports count from 0 here.
  [[nodiscard]] Eigen::VectorXcd parameter(int to, int from) const {
    return values.row(static_cast<Eigen::Index>(from) * num_ports() + to).transpose();
  }
};

/// Whether two lists of frequencies are the same, entry by entry. Eigen's == asks for equal sizes.
[[nodiscard]] inline bool is_same_grid(const Eigen::VectorXd& a, const Eigen::VectorXd& b) {
  return a.size() == b.size() && a == b;
}

/// A network of the given grid and equal references with S = 0 everywhere.
[[nodiscard]] inline Network empty_network(const Eigen::VectorXd& frequencies_hz,
                                           const Eigen::VectorXcd& reference_ohm) {
  return {
      frequencies_hz,
      Eigen::MatrixXcd::Zero(reference_ohm.size() * reference_ohm.size(), frequencies_hz.size()),
      reference_ohm};
}

}  // namespace tapwright

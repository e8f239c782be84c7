#pragma once
// Real transforms of a whole record; a thin coat over Eigen's FFT module.

#include <Eigen/Core>

namespace tapwright {

/// X_k = sum_n x_n exp(-2 pi i k n / N), k = 0 ... N/2.
///
/// Shape: x is (n), n >= 1; the result is (n / 2 + 1).
[[nodiscard]] Eigen::VectorXcd real_spectrum(const Eigen::VectorXd& x);

/// Inverse of `real_spectrum` (with the 1/N) for a record of n samples.
///
/// Shape: spectrum is (n / 2 + 1). Errors: std::invalid_argument on any other size.
[[nodiscard]] Eigen::VectorXd real_record(const Eigen::VectorXcd& spectrum, Eigen::Index n);

/// The least integer >= n of the form 2^a 3^b 5^c, for which transforms are quick.
[[nodiscard]] Eigen::Index quick_transform_size(Eigen::Index n);

}  // namespace tapwright

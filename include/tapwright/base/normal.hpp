#pragma once
// The Gaussian tail.

namespace tapwright {

/// Q with P(X > Q) = tail_probability for a standard normal X; 7.0345 at 1e-12.
///
/// Errors: std::invalid_argument unless 0 < tail_probability < 1.
[[nodiscard]] double gaussian_quantile_of_tail(double tail_probability);

/// P(X > x) for a standard normal X, accurate far into the tail.
[[nodiscard]] double gaussian_tail(double x);

}  // namespace tapwright

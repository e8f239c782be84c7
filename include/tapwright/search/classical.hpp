#pragma once
// The classical ways to set taps: zero forcing and least mean-square error.

#include <Eigen/Core>
#include <optional>
#include <vector>

#include "tapwright/eye/eye_model.hpp"
#include "tapwright/search/solution.hpp"

namespace tapwright {

/// FIR taps with q_0 = 1 that null as many other cursors as there are other taps: those at the taps'
/// own positions, and for each of these that a DFE tap cancels anyway the next later one that none
/// does.
///
/// Shape:  p is one row of cursors; the result is (num taps), not limited and not rounded.
/// Errors: empty when the equations are singular (relative pivot below 1e-12).
/// Source: R. W. Lucky, Bell Syst. Tech. J. 44(4), 1965.
[[nodiscard]] std::optional<Eigen::VectorXd> zero_forcing_taps(const std::vector<int>& positions,
                                                               const std::vector<int>& dfe_positions,
                                                               const CursorRow& p);

/// Least mean-square error with the FIR at the transmitter and the noise behind it.
///
/// With u the taps times the receiver's gain, so that the slicer wants q_0(u) = 1,
///
///     J(u) = sigma_X^2 [(q_0(u) - 1)^2 + sum over other k without a DFE tap of q_k(u)^2]
///            + u' X u + sigma^2 (sum |u_i| / P)^2,
///
/// because sum |c_i| <= P at the transmitter makes the gain at least sum |u_i| / P. Convex; solved
/// by coordinate descent on u = u+ - u-, then by the linear system on the taps that are not zero.
///
/// Shape:  p is one row of cursors; crosstalk is X, (num taps, num taps), symmetric and positive
///         semidefinite, or empty; taps is (num taps).
/// Units:  p and noise_v in the same volts; J in squares of the symbol.
struct LeastSquares {
  Eigen::VectorXd taps;    ///< u
  double mean_square = 0;  ///< J(u)
};
[[nodiscard]] LeastSquares least_squares_taps(const std::vector<int>& positions,
                                              const std::vector<int>& dfe_positions,
                                              const CursorRow& p, double symbol_variance,
                                              double noise_v, double peak_limit,
                                              const Eigen::MatrixXd& crosstalk = {});

/// The taps scaled to the peak limit, clipped to each tap's range and rounded to codes that keep
/// every limit. Empty if there are no such codes near.
[[nodiscard]] std::optional<Eigen::VectorXd> to_codes(const FirLimits& limits, Eigen::VectorXd taps);

/// The same without scaling.
[[nodiscard]] std::optional<Eigen::VectorXd> nearest_codes(const FirLimits& limits,
                                                           Eigen::VectorXd taps);

/// No equalization, zero forcing and least mean-square error on this link, scored like any other
/// setting: swing the largest that the receiver's input allows, CTLE state and sampling instant
/// where the method's own measure is best, DFE the best for these.
[[nodiscard]] std::vector<Compared> classical_methods(const EyeModel& model);

}  // namespace tapwright

#pragma once
// What AC coupling does to the baseline, with and without a line code.

#include <Eigen/Core>
#include <optional>

#include "tapwright/eye/eye_model.hpp"
#include "tapwright/eye/line_code.hpp"

namespace tapwright {

/// The slow shift of the level around which the eye opens. A first-order high pass of corner f_c
/// hangs a tail on every pulse,
///
///     b_k = -w T ( p_k / 2 + sum over j < k of p_j e^{-w T (k - j)} ),  w = 2 pi f_c,
///
/// and the tails of all earlier symbols add up. A code whose digital sum is bounded holds that to a
/// few tails; independent symbols can push it by the whole amplitude.
///
/// Units: volts at the slicer, on either side.
/// Limits: relative error about w T times the pulse's length in UI.
struct BaselineWander {
  Eigen::VectorXd tail_v;          ///< b_k from the row's first cursor on, until 1e-4 of it is left
  double mean_v = 0.0;             ///< steady shift; other than 0 for unbalanced codes only
  double rms_v = 0.0;              ///< over the code's random data, around the mean
  double worst_v = 0.0;            ///< over all sequences of the code, whichever side it helps
  double rms_independent_v = 0.0;  ///< the same for independent symbols of as many levels
  double worst_independent_v = 0.0;
};

/// Shape:  row is (num_cursors), UI-spaced without the high pass; entry main_index is the main one.
/// Units:  volts, hertz, seconds.
/// Errors: std::invalid_argument unless corner_hz > 0 and 1e-6 <= w T <= 0.1 (lower corners wander
///         less than anything else here; higher ones are part of the channel), or when main_index
///         is not in the row.
[[nodiscard]] BaselineWander baseline_wander(const LineCode& code, const Eigen::VectorXd& row,
                                             Eigen::Index main_index, double corner_hz,
                                             double ui_s);

/// Of a setting's pulse before the DFE, for the corner of the link; empty without AC coupling, or
/// with a corner outside the range above.
[[nodiscard]] std::optional<BaselineWander> baseline_wander(const EyeModel& model,
                                                            const Settings& settings);

}  // namespace tapwright

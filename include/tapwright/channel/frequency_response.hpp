#pragma once
// A transfer function over frequency: its delay, interpolation, and the way down to DC.

#include <Eigen/Core>
#include <string_view>

#include "tapwright/base/diagnostic.hpp"

namespace tapwright {

/// Shape: both members are (n); frequencies_hz rises and is >= 0.
struct FrequencyResponse {
  Eigen::VectorXd frequencies_hz;
  Eigen::VectorXcd values;
  bool ac_coupled = false;  ///< nothing passes at DC: the response falls to 0 there
};

/// Delay from the slope of the phase, weighted by magnitude.
///
/// Shape:  n >= 2.
/// Units:  seconds. More than half a turn per frequency step shows as a negative or too short
///         delay; even steps hold no other trace of it.
/// Errors: std::invalid_argument on fewer than two points.
[[nodiscard]] double bulk_delay_s(const FrequencyResponse& response);

/// `response` at other frequencies, on magnitude and unwrapped phase.
///
/// Between points both run linearly; where the phase left after the bulk delay turns by more than a
/// quarter turn in one step (a null), the complex value does. Below the first point they run
/// linearly in sqrt(f) (skin effect) to DC, where ln|H| is a fit against sqrt(f) over the lowest
/// points and the phase a multiple of pi; when AC-coupled, the magnitude runs linearly to 0. Above
/// the last point the value is 0.
///
/// Shape:  the result has the size of frequencies_hz, which must rise and not be negative.
/// Errors: an error note, labelled with `label`, when there are fewer than two points, a number is
///         not finite, frequencies do not rise, or the step reaches 1 / (2 delay); a warning when
///         the lowest points look AC-coupled though `ac_coupled` is not set.
/// Limits: with even steps, a delay of a whole turn per step or more looks like a short one.
[[nodiscard]] Result<Eigen::VectorXcd> interpolate(const FrequencyResponse& response,
                                                   const Eigen::VectorXd& frequencies_hz,
                                                   std::string_view label);

}  // namespace tapwright

#pragma once
// Where the slicer samples, and what the DFE does there.

#include <Eigen/Core>
#include <optional>

#include "tapwright/eye/eye_model.hpp"

namespace tapwright {

/// Every tap at the value nearest to the cursor it sits on: where least-mean-square adaptation of
/// the DFE settles, d_k = clip(q_k), rounded to the tap's codes. For independent symbols at one
/// phase it is also the best.
///
/// Shape: (num DFE taps); settings.dfe_v is not read. Units: volts.
[[nodiscard]] Eigen::VectorXd settled_dfe(const EyeModel& model, const Settings& settings);

/// The taps that make the link's objective largest, all else as in `settings`: the settled ones,
/// then moved code by code (by shrinking steps when a tap has no codes) while that helps, which
/// only a line code or a mask makes happen.
///
/// Shape: (num DFE taps). Units: volts.
[[nodiscard]] Eigen::VectorXd best_dfe(const EyeModel& model, const Settings& settings);

struct SamplingInstant {
  Eigen::Index phase_samples = 0;
  bool rule_held = true;  ///< false: the rule has no solution here and the best phase stands in
};

/// The sampling instant that the link's rule gives for these FIR, CTLE and swing; phase_samples and
/// dfe_v of `settings` are not read.
///
///     best            the candidate phase of the largest eye height, DFE settled at each
///     mueller_muller  h(t_s - T) = h(t_s + T) - h(t_s) b_1, h the pulse after FIR and CTLE, b_1
///                     the clipped first DFE tap over h(t_s) (IEEE 802.3 Annex 93A); of several
///                     roots the nearest before the peak, after it when the peak is too early
///     edge            half a UI after the median zero crossing of a seeded coded stream
[[nodiscard]] SamplingInstant sampling_instant(const EyeModel& model, const Settings& settings,
                                               SamplingRule rule);

}  // namespace tapwright

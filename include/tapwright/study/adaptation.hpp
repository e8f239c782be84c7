#pragma once
// Where hardware adaptation settles.

#include <string>
#include <vector>

#include "tapwright/eye/eye_model.hpp"

namespace tapwright {

/// Settings at which a least-mean-square FIR back-channel and DFE come to rest on one swing and CTLE
/// state, step by step from the ideal to the hardware:
///
///     joint      taps that minimise the mean square error within the limits, any real value, DFE
///                d_k = clip(q_k), at the sampling instant of the largest eye
///     at_clock   the same at the instant where the clock recovery holds itself, iterated
///     clipped    every tap found without limits, then clipped by itself, as integrators that run
///                into their rails do
///     settled    rounded to codes: where the hardware is expected
///
/// The error is judged by q_0^2 / (sum of q_k^2 left + noise), which the least mean square maximises
/// over the taps' scale.
/// Source: math.md section 4, "where adaptation settles".
struct Adaptation {
  Settings joint;
  Settings at_clock;
  Settings clipped;
  Settings settled;
};

/// `clock` is the link's sampling rule unless that is `best`: then Mueller-Mueller, as a receiver
/// has to find its instant by something.
[[nodiscard]] Adaptation adaptation(const EyeModel& model, std::size_t swing_index,
                                    std::size_t ctle_index);

/// The ratio that the least mean square maximises, as a plain power ratio.
[[nodiscard]] double mean_square_ratio(const EyeModel& model, const Settings& settings);

}  // namespace tapwright

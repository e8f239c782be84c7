#pragma once
// What one code either way costs, and what holds the eye back.

#include <optional>
#include <string>
#include <vector>

#include "tapwright/equalizer/knobs.hpp"
#include "tapwright/eye/score.hpp"

namespace tapwright {

/// Change of the objective's eye height when one knob moves by one code (a knob without codes by
/// 1/100 of its range).
///
/// Units: volts; empty where the move leaves the limits.
/// Source: math.md section 5.
struct KnobSensitivity {
  Knob knob;
  std::string shown;  ///< what the knob stands at
  struct Change {
    double fixed_v = 0.0;      ///< everything else stays
    double readapted_v = 0.0;  ///< DFE and sampling instant follow; a DFE knob itself stays put
  };
  std::optional<Change> down;
  std::optional<Change> up;
};

/// One entry a knob, in the order of knobs_of.
[[nodiscard]] std::vector<KnobSensitivity> knob_sensitivity(const EyeModel& model,
                                                            const Settings& settings);

/// The settings with sampling instant by the link's rule and DFE at its best for it.
[[nodiscard]] Settings readapted(const EyeModel& model, const Settings& settings);

/// Sentences on the limits that the setting runs into: knobs at the end of their range, the FIR's
/// peak limit, the receiver's input limit. Empty when none.
[[nodiscard]] std::vector<std::string> what_limits(const EyeModel& model, const Settings& settings,
                                                   const Score& score);

}  // namespace tapwright

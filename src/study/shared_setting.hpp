#pragma once
// A setting as codes, to be carried from one device description to another.

#include <optional>
#include <string>
#include <vector>

#include "tapwright/eye/eye_model.hpp"
#include "tapwright/study/sweep.hpp"

namespace tapwright {

/// Every knob, then "phase".
[[nodiscard]] std::vector<KnobValue> knob_values(const EyeModel& model, const Settings& settings);
/// Swing, FIR, CTLE and gain alone.
[[nodiscard]] std::vector<KnobValue> shared_knobs(const Device& device, const Settings& settings);

/// The setting with these codes on a device, phase and DFE not set: knobs with codes go by code (a
/// corner may change what a code stands for), others by value. Empty when the device can't take it.
[[nodiscard]] std::optional<Settings> carried_over(const std::vector<KnobValue>& knobs,
                                                   const Device& device);

/// "swing 3, fir:-1 -4, ctle 2": codes where there are any.
[[nodiscard]] std::string shown(const std::vector<KnobValue>& knobs);

/// Whether the receiver's input stays within its limit, where it has one.
[[nodiscard]] bool keeps_input_limit(const EyeModel& model, const Settings& settings);

/// Whether swings, FIR and the CTLE's codes are the same on both, so that a setting can be shared;
/// what a CTLE code does to the signal may differ.
[[nodiscard]] bool same_knobs(const Device& a, const Device& b);

}  // namespace tapwright

#pragma once
// Every knob of a device under one name, so that reports, sensitivity, audit and register writes
// speak of the same thing.

#include <optional>
#include <string>
#include <vector>

#include "tapwright/equalizer/device.hpp"

namespace tapwright {

/// A knob's place in the device. Names: "swing", "fir:-1", "ctle", "gain", "dfe:1".
struct Knob {
  enum class Kind { kSwing, kFir, kCtle, kGain, kDfe };
  Kind kind = Kind::kSwing;
  std::size_t index = 0;  ///< of the tap in its list; 0 for the others
  std::string name;
};

/// What a knob stands at.
///
/// Units: value is in the unit that `unit` names, as link files have it: mVppd, mV, dB, or none.
struct KnobReading {
  Knob knob;
  double value = 0.0;
  std::string unit;
  std::string shown;        ///< value and unit as people read them
  std::optional<int> code;  ///< none when the knob has no codes
  bool at_least = false;    ///< nothing lies below on this knob
  bool at_most = false;     ///< nothing lies above
};

/// The knobs that a device has, in the order swing, FIR, CTLE, gain, DFE.
[[nodiscard]] std::vector<Knob> knobs_of(const Device& device);

/// Every knob's reading. Shape: as knobs_of.
///
/// Errors: std::invalid_argument when the settings do not fit the device.
[[nodiscard]] std::vector<KnobReading> readings(const Device& device, const Settings& settings);

/// The settings with one knob moved by `steps` codes (of a knob without codes: by 1/100 of its
/// range), all else kept; a remainder tap follows. Empty when the move leaves the knob's range or
/// breaks a limit of the FIR.
///
/// Limits: DFE limits relative to the main cursor are kept in units of `main_cursor_v`.
[[nodiscard]] std::optional<Settings> moved(const Device& device, const Settings& settings,
                                            const Knob& knob, int steps, double main_cursor_v);

/// Index of the code whose value is nearest to `value`; codes is not empty.
[[nodiscard]] std::size_t nearest_code(const std::vector<Code>& codes, double value);

}  // namespace tapwright

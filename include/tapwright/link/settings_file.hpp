#pragma once
// Settings as a file has them.

#include <string>
#include <string_view>

#include "tapwright/link/link.hpp"

namespace tapwright {

struct GivenSettings {
  Settings settings;
  bool has_phase = false;  ///< otherwise the sampling instant is to follow the link's rule
  bool has_dfe = false;    ///< otherwise the DFE is to be adapted
};

/// Reads a solution file ("format": "tapwright.solution/1"), or a file with the object alone that
/// stands under "settings" there:
///
///     {"swing_mvppd": 800, "tx_fir": [{"position": -1, "value": -0.05}, ...],
///      "ctle": {"state": 3}, "dfe_mv": [24, 10], "phase_ui": 0.25}
///
/// A tap may give `code` instead of `value`. A tap left out stands at 0, the main tap at what the
/// others leave; swing and ctle may be left out when the device has only one.
///
/// Errors: one note for every key that is wrong, found and wanted; a value that the device can't
///         take.
[[nodiscard]] Result<GivenSettings> settings_from_json(const Link& link, std::string_view text,
                                                       const std::string& file_name);

}  // namespace tapwright

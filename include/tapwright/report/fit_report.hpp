#pragma once
// A line model found from a measurement, in words and as a channel for a link file.

#include <string>

#include "tapwright/channel/line_fit.hpp"

namespace tapwright {

struct FitReport {
  std::string file;
  LineFit fit;
  double reference_ohm = 50.0;  ///< of the measured ports; impedances are told as they are there
  double predicted_length_m = 0.0;
  Network predicted;  ///< of that length, on the measured grid
};

[[nodiscard]] std::string text_of(const FitReport& report);

/// "tapwright.fit/1": the model, its residual, the prediction's loss and delay, and "channel",
/// which a link file takes as it stands. A channel is differential: a single line between 50 ohm
/// ports becomes a pair of such lines, its impedances times 100 / reference.
[[nodiscard]] std::string json_of(const FitReport& report);

}  // namespace tapwright

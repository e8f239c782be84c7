#pragma once
// From the channel section of a link file to the pulse at the receiver's input.

#include <optional>

#include "link/files.hpp"
#include "link/section.hpp"
#include "tapwright/channel/received_spectrum.hpp"

namespace tapwright {

/// What a channel's pulse depends on beside the channel itself.
struct PulseConditions {
  double ui_s = 0.0;
  int samples_per_ui = 32;
  Eigen::Index min_num_ui = 0;  ///< the record holds at least so many UI
};

/// Samples per UI that the channel fixes; empty when any number will do.
[[nodiscard]] std::optional<int> samples_per_ui_of(const Section& channel);

/// Notes go to the section; empty when there is an error.
[[nodiscard]] std::optional<ReceivedSpectrum> read_channel(const Section& channel,
                                                           const PulseConditions& conditions,
                                                           InputFiles& files);

}  // namespace tapwright

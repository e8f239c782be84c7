#pragma once
// From the channel section of a link file to the pulse at the receiver's input.

#include <optional>

#include "link/files.hpp"
#include "link/section.hpp"
#include "tapwright/channel/received_spectrum.hpp"

namespace tapwright {

/// What a channel's pulse depends on beside the channel itself.
struct PulseConditions {
  TimeGrid grid;
  LaunchShape launch;
  bool is_victim = true;  ///< not an aggressor: polarity and missing port maps can be told
  std::optional<double> source_ohm;  ///< none: the reference of the first piece
  double source_f = 0.0;
  std::optional<double> load_ohm;  ///< none: the reference of the last piece
  double load_f = 0.0;
};

/// Samples per UI of an inline pulse; empty for any other kind of channel.
[[nodiscard]] std::optional<int> samples_per_ui_of(const Section& channel);

/// Notes go to the section; empty when there is an error.
[[nodiscard]] std::optional<ReceivedSpectrum> read_channel(const Section& channel,
                                                           const PulseConditions& conditions,
                                                           InputFiles& files);

/// The same record with zeros behind it, so that all records of a link are equally long.
[[nodiscard]] ReceivedSpectrum lengthened(ReceivedSpectrum spectrum, Eigen::Index num_samples);

}  // namespace tapwright

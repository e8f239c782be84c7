#pragma once
// What leaves the channel room, whatever the channel was given as.

#include <Eigen/Core>

#include "tapwright/channel/pulse_response.hpp"

namespace tapwright {

/// The pulse at the receiver's input for a launch amplitude of 1 V (swing 2000 mVppd), as the
/// spectrum of one record: before the receiver's noise filter and CTLE, with the transmitter's edge
/// filter in it.
///
/// Shape:  values is (num_samples / 2 + 1); num_samples is a whole number of UI times
///         samples_per_ui. Entry k belongs to frequency k * df_hz() and is the DFT coefficient:
///         real_record(values, num_samples) gives the samples in volts.
/// Units:  volts, hertz, seconds.
struct ReceivedSpectrum {
  Eigen::VectorXcd values;
  Eigen::Index num_samples = 0;
  int samples_per_ui = 1;
  double ui_s = 0.0;
  /// The record is already what the slicer sees ("taken_at": "slicer"): no receiver filter applies.
  bool at_slicer = false;
  /// What the interpolation, taper and record could hide; each is the worst-case effect on the sum
  /// of cursors, in volts at 1 V launch, where it could be estimated.
  double energy_above_last_point = 0.0;  ///< share of the pulse's energy above the data's top
  double record_noise_v = 0.0;           ///< RMS seen before the signal can have arrived

  [[nodiscard]] double df_hz() const {
    return samples_per_ui / (ui_s * static_cast<double>(num_samples));
  }
};

}  // namespace tapwright

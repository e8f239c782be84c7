#pragma once
// What leaves the channel room, whatever the channel was given as.

#include <Eigen/Core>
#include <optional>
#include <string_view>

#include "tapwright/base/diagnostic.hpp"
#include "tapwright/channel/frequency_response.hpp"
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
  /// Time of sample 0 relative to the start of the symbol's launch; a record made from a frequency
  /// response opens some UI early, so that what comes before the peak has room.
  double start_s = 0.0;
  /// What the interpolation, taper and record could hide; each is the worst-case effect on the sum
  /// of cursors, in volts at 1 V launch, where it could be estimated.
  double energy_above_last_point = 0.0;  ///< share of the pulse's energy above the data's top
  double record_noise_v = 0.0;           ///< RMS seen before the signal can have arrived

  [[nodiscard]] double df_hz() const {
    return samples_per_ui / (ui_s * static_cast<double>(num_samples));
  }
};

/// The grid in time that all records of a link share.
struct TimeGrid {
  double ui_s = 0.0;
  int samples_per_ui = 32;
  int min_num_ui = 0;  ///< the record holds at least so many UI, for a span that needs them
};

/// What the launch adds to the flat pulse of one UI.
struct LaunchShape {
  std::optional<double> rise_time_s;   ///< 20-80 %, Gaussian edge filter of Annex 93A
  std::optional<double> high_pass_hz;  ///< first-order AC coupling anywhere in the path
};

/// Gaussian edge filter and AC coupling. Shape: as frequencies_hz.
///
///     H_t = exp(-2 (pi f t_r / 1.6832)^2) * (j f / f_c) / (1 + j f / f_c)
///
/// Source: IEEE 802.3 Annex 93A for the edge filter (constant from memory; the test re-derives the
///         rise time).
[[nodiscard]] Eigen::VectorXcd launch_response(const LaunchShape& launch,
                                               const Eigen::VectorXd& frequencies_hz);

/// The pulse that a frequency response passes on, at 1 V launch:
///
///     P(f) = T sinc(f T) exp(-j pi f T) H_t(f) H(f)
///
/// The record is a whole number of UI, no shorter than the data resolve (1 / step), and long enough
/// for the delay and for AC coupling to die away, up to 2^22 samples. Above the last point the
/// response keeps its magnitude and delay under a raised cosine over the next tenth of the band.
///
/// Errors: notes carry `label`; errors as in `interpolate`, and unless ui_s > 0 and samples_per_ui
///         >= 2. Warnings, each with its size in mV at 1 V launch, for energy above the last
///         point, for a record that has not died away, for record noise.
[[nodiscard]] Result<ReceivedSpectrum> received_spectrum(const FrequencyResponse& response,
                                                         const TimeGrid& grid,
                                                         const LaunchShape& launch,
                                                         std::string_view label);

/// An imported pulse, already scaled to 1 V launch, brought onto the grid.
///
/// A record with another number of samples per UI is resampled by a quintic spline; one with a
/// single sample per UI can't be and keeps its samples, whatever the grid says.
/// Zeros follow so that later filters die away inside the record.
///
/// Errors: an error note when the record's UI is not the grid's; warnings when the record stops
///         before the pulse has died away, and when it is coarser than four samples per UI.
[[nodiscard]] Result<ReceivedSpectrum> received_spectrum(const PulseResponse& at_1v,
                                                         const TimeGrid& grid,
                                                         std::string_view label);

}  // namespace tapwright

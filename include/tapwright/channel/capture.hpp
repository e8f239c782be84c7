#pragma once
// Records in time that an oscilloscope or a simulator wrote: pulse, step, waveform.

#include <Eigen/Core>
#include <optional>
#include <string>
#include <string_view>

#include "tapwright/base/diagnostic.hpp"
#include "tapwright/channel/pulse_response.hpp"
#include "tapwright/channel/received_spectrum.hpp"

namespace tapwright {

/// An evenly sampled record.
///
/// Units: volts and seconds.
struct Capture {
  Eigen::VectorXd samples_v;
  double start_s = 0.0;
  double dt_s = 0.0;
};

/// How to read a file whose text does not say it all.
struct CaptureFormat {
  std::optional<double> dt_s;         ///< the file has no time column, samples are so far apart
  std::optional<double> time_unit_s;  ///< otherwise from the heading, else seconds
  std::optional<double> value_unit_v;
  std::optional<int> value_column;  ///< 1-based; by default the first after the time
  std::optional<int> minus_column;  ///< 1-based; subtracted: two single-ended channels
};

/// Parses the text of a capture; opens nothing. `file_name` only labels the notes.
///
/// Rows of numbers between commas, semicolons, tabs or blanks, with a decimal point, or a decimal
/// comma where the separator is another; any heading lines before them. Units stand in the heading
/// as `s ms us ns ps fs` and `V mV uV`. Times must rise; uneven times are brought to an even grid
/// (linear between points) with a warning.
///
/// Errors: notes with file:line, what was found and what was wanted.
[[nodiscard]] Result<Capture> parse_capture(std::string_view text, std::string_view file_name,
                                            const CaptureFormat& format = {});

/// Reads a file. `file_name` is opened as given and labels the notes.
[[nodiscard]] Result<Capture> read_capture(const std::string& file_name,
                                           const CaptureFormat& format = {});

/// A pulse record taken at swing 2 * launch_v (peak to peak), at 1 V launch on the grid.
///
/// Errors: an error note unless launch_v > 0 and the record holds at least 1 UI; warnings as for a
///         record that opens or ends in the middle of the pulse.
[[nodiscard]] Result<PulseResponse> pulse_from_pulse(const Capture& pulse, const TimeGrid& grid,
                                                     double launch_v, std::string_view label);

/// The pulse of a step record: p(t) = (s(t) - s(t - T)) / step_v.
///
/// step_v is the launched height of the step. Errors: as `pulse_from_pulse`.
[[nodiscard]] Result<PulseResponse> pulse_from_step(const Capture& step, const TimeGrid& grid,
                                                    double step_v, std::string_view label);

}  // namespace tapwright

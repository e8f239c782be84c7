#pragma once
// From a captured waveform with a known pattern to the pulse response.

#include <string_view>

#include "tapwright/base/diagnostic.hpp"
#include "tapwright/channel/capture.hpp"
#include "tapwright/channel/pattern.hpp"
#include "tapwright/channel/pulse_response.hpp"

namespace tapwright {

struct LinearFitOptions {
  double symbol_rate_bd = 0.0;     ///< as told; the fit finds the true one
  double rate_tolerance = 300e-6;  ///< how far the true one may be, as a ratio
  int samples_per_ui = 32;         ///< of the pulse
  int num_pre_ui = 8;              ///< pulse kept before its peak
  int num_post_ui = 120;           ///< and after it
  double launch_v = 1.0;           ///< peak differential launch amplitude of the waveform
};

struct LinearFit {
  PulseResponse pulse;              ///< at 1 V launch, UI as told
  double symbol_rate_bd = 0.0;      ///< as found
  double rate_error = 0.0;          ///< found / told - 1
  std::int64_t pattern_offset = 0;  ///< index of the symbol whose pulse peaks first in the record
  bool inverted = false;            ///< the pattern fits better with its sign changed
  double error_rms_v = 0.0;         ///< waveform minus fit, per sample
  double snr_db = 0.0;              ///< fitted signal's RMS over error RMS
  double offset_v = 0.0;            ///< constant part of the waveform
};

/// Symbol rate, phase and pattern offset are found, then the pulse by linear least squares.
///
/// Source: linear-fit procedure of IEEE 802.3 clause 85 (85.8.3.3.5), here without averaging over
///         periods first.
/// Errors: error notes labelled `label`: a record shorter than the pulse asked for, fewer than two
///         samples per UI, no trace of the pattern.
[[nodiscard]] Result<LinearFit> fit_pulse(const Capture& waveform, const Pattern& pattern,
                                          const LinearFitOptions& options, std::string_view label);

}  // namespace tapwright

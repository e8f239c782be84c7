#pragma once
// From a captured waveform with a known pattern to the pulse response.

#include <cstdint>
#include <string_view>

#include "tapwright/base/diagnostic.hpp"
#include "tapwright/channel/capture.hpp"
#include "tapwright/channel/pattern.hpp"
#include "tapwright/channel/pulse_response.hpp"

namespace tapwright {

struct LinearFitOptions {
  double symbol_rate_bd = 0.0;     ///< as told; the true one is found
  double rate_tolerance = 300e-6;  ///< how far the true one may be, as a ratio
  int samples_per_ui = 32;         ///< of the pulse
  int num_pre_ui = 8;              ///< UI of the pulse before its peak
  int num_post_ui = 120;           ///< and after it; shortened to what the pattern can tell
  double launch_v = 1.0;           ///< peak differential launch amplitude of the waveform
};

struct LinearFit {
  PulseResponse pulse;              ///< at 1 V launch; UI as told, peak after num_pre_ui UI
  double symbol_rate_bd = 0.0;      ///< as found
  std::int64_t pattern_offset = 0;  ///< index of the first symbol whose peak lies in the record
  bool inverted = false;            ///< the waveform is the pattern with its sign changed
  double offset_v = 0.0;            ///< constant part of the waveform
  double error_rms_v = 0.0;         ///< waveform minus fit, per sample, unbiased
  double snr_db = 0.0;              ///< RMS of the fitted signal over the error's
  Eigen::Index num_symbols = 0;     ///< rows of the fit
};

/// Symbol rate, phase and pattern offset are found, then the pulse by linear least squares, one fit
/// per phase of the UI, over up to 65536 symbols from the start of the record.
///
/// Source: linear-fit procedure of IEEE 802.3 clause 85 (85.8.3.3.5), here with a constant as one
///         more unknown and without averaging periods first.
/// Errors: error notes labelled `label` for options out of range, a record too short or too coarse,
///         a pattern too short for the pulse, a waveform without a trace of the pattern. Warnings
///         for a shortened pulse, an inverted waveform, a rate found off by more than 1 ppm.
[[nodiscard]] Result<LinearFit> fit_pulse(const Capture& waveform, const Pattern& pattern,
                                          const LinearFitOptions& options, std::string_view label);

}  // namespace tapwright

#pragma once
// The knobs of both ends, and what the receiver makes of a channel in each CTLE state.

#include <optional>
#include <string>
#include <variant>
#include <vector>

#include "tapwright/channel/received_spectrum.hpp"
#include "tapwright/equalizer/ctle.hpp"
#include "tapwright/equalizer/dfe.hpp"
#include "tapwright/equalizer/tx_fir.hpp"

namespace tapwright {

/// Code and peak differential launch amplitude (half of the swing in mVppd) in volts.
using Swing = Code;

struct Transmitter {
  std::vector<Swing> swings;  ///< ascending, at least one
  FirLimits fir;
  std::optional<double> snr_db;  ///< transmitter signal-to-noise ratio
};

struct Receiver {
  std::optional<double> bandwidth_hz;  ///< noise filter; none = no filter
  std::vector<CtleState> ctle;         ///< at least one; a flat state when the device has none
  DfeLimits dfe;
  std::optional<double> noise_density_v2_per_hz;
  std::optional<double> noise_rms_v;   ///< at the slicer, instead of a density
  std::optional<double> peak_input_v;  ///< peak differential, before noise filter and CTLE
  double sensitivity_v = 0.0;          ///< slicer sensitivity, taken off the inner eye on each side
};

struct Device {
  Transmitter transmitter;
  Receiver receiver;
};

/// One setting of every knob. Values are kept beside codes because an answer may be continuous.
struct Settings {
  std::size_t swing_index = 0;
  Eigen::VectorXd fir;  ///< (num taps), in the order of FirLimits::taps
  std::size_t ctle_index = 0;
  Eigen::VectorXd dfe_v;  ///< (num DFE taps), in the order of DfeLimits; volts at the slicer
  /// Sampling instant: samples after the peak of the CTLE state's unequalised pulse.
  Eigen::Index phase_samples = 0;
};

/// Pulses of one CTLE state at a launch amplitude of 1 V; every pulse of a link has one grid.
struct StatePulses {
  PulseResponse victim;
  std::vector<PulseResponse> aggressors;
  double noise_v = 0.0;  ///< receiver noise at the slicer, RMS
  [[nodiscard]] Eigen::Index peak_index() const { return victim.peak_index(); }
};

/// The pulses for every CTLE state, in the order of receiver.ctle, in one batch.
///
/// Errors: std::invalid_argument if the records differ in grid.
[[nodiscard]] std::vector<StatePulses> state_pulses(
    const Receiver& receiver, const ReceivedSpectrum& victim,
    const std::vector<ReceivedSpectrum>& aggressors);

/// The pulse before noise filter and CTLE, at 1 V launch: what the peak-input limit looks at.
[[nodiscard]] PulseResponse input_pulse(const ReceivedSpectrum& victim);

/// Largest peak differential voltage at the receiver input at 1 V launch: the largest over phases
/// of sum_k |q_in,k|. Convex in the taps.
[[nodiscard]] double peak_input_v(const FirLimits& limits, const Eigen::VectorXd& taps,
                                  const PulseResponse& input);

}  // namespace tapwright

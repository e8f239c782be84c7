#pragma once
// Receiver CTLE and noise filter, as frequency responses.

#include <Eigen/Core>
#include <complex>
#include <optional>
#include <string>
#include <variant>
#include <vector>

#include "tapwright/equalizer/code.hpp"

namespace tapwright {

/// H = (10^(g/20) + jf/f_z) / ((1 + jf/f_p1)(1 + jf/f_p2)), optionally times
/// (10^(g2/20) + jf/f_lf) / (1 + jf/f_lf).
///
/// Source: IEEE 802.3 Annex 93A. f_z is the annex's symbol; the zero lies at f_z 10^(g/20).
struct CtleReference {
  double dc_gain_db = 0.0;
  double f_z_hz = 0.0;
  double f_p1_hz = 0.0;
  double f_p2_hz = 0.0;
  struct LowFrequency {
    double dc_gain_db = 0.0;
    double f_lf_hz = 0.0;
  };
  std::optional<LowFrequency> low_frequency;
};

/// H = gain prod(1 + jf/z) / prod(1 + jf/p); complex zeros and poles come in conjugate pairs.
struct CtleZerosPoles {
  double gain = 1.0;
  std::vector<std::complex<double>> zeros_hz;
  std::vector<std::complex<double>> poles_hz;
};

/// A measured response, interpolated on magnitude and unwrapped phase, held beyond its ends.
struct CtleMeasured {
  Eigen::VectorXd frequencies_hz;  ///< rising
  Eigen::VectorXcd values;
};

/// One setting of CTLE (and gain stage, when the device has one).
struct CtleState {
  int code = 0;
  std::string label;  ///< as the reader wrote it, such as "-3 dB"
  std::variant<CtleReference, CtleZerosPoles, CtleMeasured> response;
  std::optional<Code> gain;  ///< gain stage behind the CTLE: code and voltage ratio
};

/// H(f) of the state, gain stage included. Shape: as frequencies_hz.
[[nodiscard]] Eigen::VectorXcd response(const CtleState& state,
                                        const Eigen::VectorXd& frequencies_hz);

/// Fourth-order Butterworth low-pass, -3 dB at bandwidth_hz. Source: IEEE 802.3 Annex 93A.
[[nodiscard]] Eigen::VectorXcd noise_filter_response(double bandwidth_hz,
                                                     const Eigen::VectorXd& frequencies_hz);

/// RMS of white noise of the one-sided density through noise filter and CTLE.
///
/// Units: density in V^2/Hz; result in volts. A missing bandwidth means no noise filter; then the
///        CTLE's own roll-off must bound the integral.
/// Errors: std::invalid_argument when the integral has no bound.
[[nodiscard]] double filtered_noise_v(double density_v2_per_hz, std::optional<double> bandwidth_hz,
                                      const CtleState& state);

}  // namespace tapwright

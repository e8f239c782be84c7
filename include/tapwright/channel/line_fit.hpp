#pragma once
// A line model found from a measured piece of known length, and what it says of another length.

#include <Eigen/Core>
#include <optional>
#include <string_view>

#include "tapwright/base/diagnostic.hpp"
#include "tapwright/channel/line_model.hpp"
#include "tapwright/channel/network.hpp"

namespace tapwright {

/// What stands at each end of the measured line, alike on both sides: a connector or launch, as a
/// short line without loss.
struct EndSection {
  double z_c_ohm = 0.0;
  double delay_s = 0.0;
};

struct LineFit {
  AnnexLine model;
  std::optional<EndSection> ends;  ///< none where they do not make the fit better
  double length_m = 0.0;           ///< of the piece that was measured
  double top_hz = 0.0;             ///< highest frequency used
  double residual_s21 = 0.0;       ///< RMS of |s21 - model| over the band used
  double residual_s11 = 0.0;       ///< the same of s11 and s22
  double residual_db = 0.0;        ///< RMS of 20 log10 |s21 / model|
};

/// Least squares of s21, s11 and s22 (the reflections at a third of the weight) over the annex
/// form, with and without dispersion and end sections; the simplest form wins that comes within a
/// quarter of the best one's residual.
///
/// Band: up to top_hz, or without it up to where the reflection first passes -15 dB: above that,
/// the launches rule and not the line. Errors: an error note labelled `label` unless the network
/// has two ports with one real reference,
///         length_m > 0, and at least 16 points above 0 Hz lie in the band, in steps that
///         `interpolate` accepts.
[[nodiscard]] Result<LineFit> fit_line(const Network& measured, double length_m,
                                       std::string_view label,
                                       std::optional<double> top_hz = std::nullopt);

/// The fit's line of another length between the same ends.
///
/// Errors: std::invalid_argument as `line_network`.
[[nodiscard]] Network predicted_network(const LineFit& fit, double length_m,
                                        const Eigen::VectorXd& frequencies_hz,
                                        double reference_ohm);

}  // namespace tapwright

#pragma once
// Uniform lines from a formula, a data sheet, constants per metre or dimensions.

#include <Eigen/Core>
#include <optional>
#include <string_view>
#include <variant>
#include <vector>

#include "tapwright/base/diagnostic.hpp"
#include "tapwright/channel/network.hpp"

namespace tapwright {

/// What a line open to the air adds: the permittivity seen rises with frequency.
///
///     tau(f) = tau sqrt(1 + rise x^2 / (1 + x^2)),  x = f / knee_hz
///
/// Source: the form of Getsinger, IEEE Trans. MTT 21(1), 1973.
struct Dispersion {
  double rise = 0.0;  ///< of the permittivity, as a ratio, far above the knee
  double knee_hz = 0.0;
};

/// gamma = gamma0 + a1 (1 + j) sqrt(f) + a2 f (1 - j (2/pi) ln(f / 1 GHz)) + j 2 pi f tau.
///
/// Units:  gamma0 in 1/m, a1 in sqrt(s)/m, a2 and tau in s/m, all per base SI.
/// Source: IEEE 802.3 Annex 93A; the annex has no dispersion.
/// Limits: causal within the band used, not for all frequencies.
struct AnnexLine {
  double gamma0_per_m = 0.0;
  double a1_sqrt_s_per_m = 0.0;
  double a2_s_per_m = 0.0;
  double tau_s_per_m = 0.0;
  double z_c_ohm = 0.0;
  std::optional<Dispersion> dispersion = std::nullopt;
};

/// The annex's own units: gamma0 in 1/mm, a1 in sqrt(ns)/mm, a2 and tau in ns/mm.
[[nodiscard]] AnnexLine annex_line(double gamma0_per_mm, double a1_sqrt_ns_per_mm,
                                   double a2_ns_per_mm, double tau_ns_per_mm, double z_c_ohm);

/// What a cable's data sheet says.
struct DatasheetLine {
  struct LossPoint {
    double frequency_hz = 0.0;
    double loss_db_per_m = 0.0;
  };
  std::vector<LossPoint> loss;  ///< two or more frequencies
  double delay_s_per_m = 0.0;   ///< at 1 GHz, before what skin effect adds
  double impedance_ohm = 0.0;
};

/// Constant resistance, inductance, conductance and capacitance per metre.
struct RlgcLine {
  double r_ohm_per_m = 0.0;
  double l_h_per_m = 0.0;
  double g_s_per_m = 0.0;
  double c_f_per_m = 0.0;
};

/// Strip over one plane. Source: Hammerstad and Jensen, IEEE MTT-S 1980; dispersion by Kirschning
/// and Jansen, Electronics Letters 18(6), 1982 (constants from memory).
struct Microstrip {
  double width_m = 0.0;
  double height_m = 0.0;
  double thickness_m = 0.0;
};
/// Strip midway between two planes. Source: Cohn 1954 with Wheeler's 1978 thickness correction.
struct Stripline {
  double width_m = 0.0;
  double plane_spacing_m = 0.0;
  double thickness_m = 0.0;
};
/// Two round wires side by side.
struct WirePair {
  double diameter_m = 0.0;
  double spacing_m = 0.0;  ///< centre to centre
};
/// Round wire in a round shield.
struct Coax {
  double inner_diameter_m = 0.0;
  double outer_diameter_m = 0.0;
};

/// Diameter of solid wire. Source: ASTM B258: 0.127 mm * 92^((36 - gauge) / 39).
[[nodiscard]] double awg_diameter_m(double gauge);

/// Metal, smooth or rough.
struct Conductor {
  double conductivity_s_per_m = 5.8e7;  ///< at 20 degrees Celsius; annealed copper (IACS)
  double temperature_c = 20.0;
  double temperature_coefficient_per_k = 3.93e-3;  ///< of resistance; annealed copper
  /// Hammerstad's law: R rises by 1 + (2/pi) atan(1.4 (rms / skin depth)^2).
  std::optional<double> roughness_rms_m;
};

/// Wideband Debye dielectric: flat loss tangent between two corner frequencies, causal.
///
/// Source: Djordjevic, Biljic, Likar-Smiljanic and Sarkar, IEEE Trans. EMC 43(4), 2001.
struct Dielectric {
  double eps_r = 1.0;      ///< at frequency_hz
  double tan_delta = 0.0;  ///< at frequency_hz
  double frequency_hz = 1e9;
  double low_corner_hz = 1e3;
  double high_corner_hz = 1e12;
};

/// Dimensions and materials.
///
/// Conductor loss by Wheeler's incremental-inductance rule; internal impedance
/// sqrt(R_dc^2 + 2 j R_hf^2), which is causal and goes from R_dc to (1 + j) R_hf.
/// Limits: quasi-TEM; no radiation, no weave.
struct PhysicalLine {
  std::variant<Microstrip, Stripline, WirePair, Coax> geometry;
  Conductor conductor;
  Dielectric dielectric;
};

using LineModel = std::variant<AnnexLine, DatasheetLine, RlgcLine, PhysicalLine>;

/// Propagation constant and characteristic impedance, at 0 Hz as at 1 mHz, since the impedance of a
/// line with series resistance alone has no bound there. Shape: as frequencies_hz.
struct LineConstants {
  Eigen::VectorXcd gamma_per_m;
  Eigen::VectorXcd z_c_ohm;
};

/// What is wrong with the model's numbers, or odd in them; empty when nothing is.
[[nodiscard]] std::vector<Diagnostic> check_line(const LineModel& model, std::string_view label);

/// Errors: std::invalid_argument if the model does not pass `check_line`, or for a negative
///         frequency.
[[nodiscard]] LineConstants line_constants(const LineModel& model,
                                           const Eigen::VectorXd& frequencies_hz);

/// The data sheet's loss as a1 sqrt(f) + a2 f, both >= 0, by least squares; two points whose slope
/// lies between the two laws are met exactly.
[[nodiscard]] AnnexLine to_annex_line(const DatasheetLine& sheet);

/// Delay of the whole length at a frequency, from the phase.
[[nodiscard]] double line_delay_s(const LineModel& model, double length_m, double frequency_hz);

/// Skin depth of a metal. Units: metres.
[[nodiscard]] double skin_depth_m(const Conductor& conductor, double frequency_hz);

/// Relative permittivity eps' - j eps''. Shape: as frequencies_hz.
[[nodiscard]] Eigen::VectorXcd permittivity(const Dielectric& dielectric,
                                            const Eigen::VectorXd& frequencies_hz);

/// S-parameters of a length of line between two ports of one reference.
///
/// Errors: std::invalid_argument as `line_constants`, or unless length_m >= 0, reference_ohm > 0.
[[nodiscard]] Network line_network(const LineModel& model, double length_m,
                                   const Eigen::VectorXd& frequencies_hz, double reference_ohm);

/// Frequencies at which to compute a modelled channel: from 0 in even steps, fine enough for the
/// delay and its echoes and for a record of at least 1024 UI, up to four times the symbol rate.
///
/// Errors: std::invalid_argument unless symbol_rate_bd > 0 and delay_s >= 0, finite.
[[nodiscard]] Eigen::VectorXd modelled_frequencies_hz(double symbol_rate_bd, double delay_s);

}  // namespace tapwright

#pragma once
// How far a measured file can be trusted, and what its path is like.

#include <Eigen/Core>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "tapwright/base/diagnostic.hpp"
#include "tapwright/channel/network.hpp"
#include "tapwright/channel/ports.hpp"

namespace tapwright {

/// The data of a whole file, whatever its ports are for.
///
/// The percentages are those of IEEE 370-2020, initial (frequency-domain) quality, from memory:
/// passivity loses (|S|_2 - 1.00001)/0.1 of a point where |S|_2 > 1.00001; reciprocity likewise
/// (mean |Sij - Sji| - 1e-6)/0.1; causality is the share of the turning of the polar plot that goes
/// clockwise, the least of all parameters.
struct DataQuality {
  double passivity_percent = 0.0;
  double reciprocity_percent = 0.0;
  double causality_percent = 0.0;
  double largest_gain = 0.0;  ///< largest singular value of S over all points
  double largest_gain_hz = 0.0;
  Eigen::Index num_points = 0;
  double lowest_hz = 0.0;  ///< 0 = the file has its DC point
  double highest_hz = 0.0;
  double largest_step_hz = 0.0;
};

/// Shape: at least three points. Errors: std::invalid_argument on fewer.
[[nodiscard]] DataQuality measure_data(const Network& network);

/// Characteristic impedance along a path, seen from one end.
///
/// Shape: entry i holds from delay_s[i] to delay_s[i + 1]; delays are one way from the port.
struct ImpedanceProfile {
  Eigen::VectorXd delay_s;
  Eigen::VectorXd impedance_ohm;
  /// Reflection at the start of entry i, coming from the entry before (the port's reference).
  Eigen::VectorXd reflection;
  double resolution_s = 0.0;  ///< one way, 10-90 % of a step
};

/// The profile by layer peeling: the reflection's impulse response (raised-cosine taper up to the
/// last frequency) is taken apart boundary by boundary, so that reflections behind reflections do
/// not appear as impedances of their own.
///
/// Shape:  port is 0 or 1 of a two-port with at least 8 points; the profile ends at `until_s`.
/// Errors: std::invalid_argument otherwise, or unless until_s > 0.
/// Source: dynamic deconvolution, J. A. Ware and K. Aki, J. Acoust. Soc. Am. 45(4), 1969.
/// Limits: loss is not taken out and shows as a slow rise of impedance.
[[nodiscard]] ImpedanceProfile impedance_profile(const Network& two_port, int port, double until_s);

/// The place of a path that reflects most.
struct WorstReflection {
  double delay_s = 0.0;  ///< one way from the driver
  double share = 0.0;    ///< of the path's whole delay: 0 at the driver, 1 at the receiver
  double impedance_before_ohm = 0.0;
  double impedance_ohm = 0.0;  ///< the one farthest from that before, at the profile's resolution
  double reflection = 0.0;     ///< between the two
  /// Worst-case eye height that a uniform line in this place would bring back, unequalised, at 1 V
  /// launch. An estimate: the difference between two layered models made from the path's
  /// reflection, with its loss spread evenly, which see parts down to the profile's resolution.
  double eye_cost_v = 0.0;
};

/// The path between driver and receiver at a symbol rate.
struct PathQuality {
  double delay_s = 0.0;
  double turns_per_step = 0.0;  ///< phase per largest frequency step; under 0.5 or it is ambiguous
  double top_over_symbol_rate = 0.0;
  double insertion_loss_db = 0.0;  ///< at half the symbol rate, or at the last point if lower
  double insertion_loss_hz = 0.0;  ///< the frequency meant
  double return_loss_in_db = 0.0;  ///< least up to 3/4 of the symbol rate
  double return_loss_in_hz = 0.0;
  double return_loss_out_db = 0.0;
  double return_loss_out_hz = 0.0;
  /// Largest distance of the loss from its fit a0 + a1 sqrt(f) + a2 f + a4 f^2, up to 3/4 of the
  /// symbol rate. Source: IEEE 802.3 clause 93A.3, fitted insertion loss (from memory).
  double ripple_db = 0.0;
  double ripple_hz = 0.0;
  /// Differential paths only. Skew: how much later the - line's signal comes than the + line's when
  /// the pair is driven differentially, from the phase up to half the symbol rate.
  std::optional<double> skew_s;
  std::optional<double> mode_conversion_db;         ///< |S_cd21| at insertion_loss_hz
  std::optional<WorstReflection> worst_reflection;  ///< none where nothing reflects over 1e-4
};

/// Errors: those of check_ports; fewer than 8 points; symbol_rate_bd not > 0.
[[nodiscard]] Result<PathQuality> measure_path(const Network& network, const PortMap& map,
                                               double symbol_rate_bd, std::string_view label);

/// One row of the table for people.
struct QualityRow {
  enum class Verdict { kGood, kAcceptable, kDoubtful, kPoor };
  std::string name;
  std::string value;  ///< with its unit
  Verdict verdict = Verdict::kGood;
  std::string remark;  ///< what the verdict rests on, or what to do; may be empty
};

/// Both as a table. Millivolts are at `launch_v`. The grades of the percentages are IEEE 370's
/// (from memory); the others are common practice.
[[nodiscard]] std::vector<QualityRow> quality_rows(const DataQuality& data, const PathQuality& path,
                                                   double launch_v = 1.0);

/// The network with every singular value above 1 cut to 1: per frequency the nearest passive matrix
/// in the Frobenius and the spectral norm. Causality is not looked after; to be done on request
/// only, and to be stated: `num_changed` points by at most `largest_change` (spectral norm).
///
/// Source: the projection on the unit ball of the spectral norm, N. J. Higham, "Matrix nearness
///         problems and applications", 1989.
struct PassiveRepair {
  Network network;
  Eigen::Index num_changed = 0;
  double largest_change = 0.0;
};
[[nodiscard]] PassiveRepair nearest_passive(const Network& network);

}  // namespace tapwright

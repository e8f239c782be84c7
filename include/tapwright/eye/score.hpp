#pragma once
// What a setting is worth.

#include <Eigen/Core>
#include <optional>
#include <string>
#include <vector>

#include "tapwright/eye/placed_eye.hpp"

namespace tapwright {

/// Eye heights of one setting of the DFE.
struct EyeHeights {
  double worst_case_v = 0.0;
  std::optional<double> at_error_ratio_v;  ///< empty where it is not defined
};

/// Everything a setting is worth. Heights are inner eye heights; negative means a closed eye.
///
/// Units: volts at the actual swing, UI, dB.
/// Source: math.md section 3.
struct Score {
  double main_cursor_v = 0.0;  ///< q_0
  double signal_v = 0.0;       ///< q_0 R_LM/(L-1): half the inner eye without disturbance
  double isi_v = 0.0;          ///< worst-case intersymbol interference that the line code can make
  double isi_independent_v = 0.0;  ///< sum of |r_k|: independent symbols
  double crosstalk_v = 0.0;
  double dual_dirac_v = 0.0;  ///< A_DD sum |h_J,k|
  double sigma_receiver_v = 0.0;
  double sigma_transmitter_v = 0.0;
  double sigma_jitter_v = 0.0;
  double sigma_v = 0.0;              ///< root of the sum of squares of the three
  double gaussian_v = 0.0;           ///< Q sigma at the target's error ratio
  double sensitivity_v = 0.0;        ///< slicer sensitivity
  std::vector<double> aggressors_v;  ///< worst case of each, in the link's order

  EyeHeights height;  ///< with the DFE of the settings, least under the mask
  Eigen::VectorXd settled_dfe_v;
  EyeHeights settled;  ///< with the DFE where adaptation would leave it

  /// Phases around t_s where the worst case stays open, at most 1; empty with too few samples per
  /// UI.
  std::optional<double> eye_width_worst_case_ui;
  std::optional<double> eye_width_ui;  ///< the same at the error ratio
  std::optional<double> ratio_db;      ///< 20 log10(signal_v / N(P)); empty when q_0 <= 0

  double peak_input_v = 0.0;  ///< receiver input, peak differential
  std::optional<double> peak_input_limit_v;
  double outside_span_v = 0.0;  ///< worst case, under the code, of what the span leaves out
  CursorRow residual_v;         ///< r_k; entry main_index is q_0
  /// The symbols that make isi_v, in the order sent, whole characters of the line code; entry
  /// worst_sequence_main is the main symbol.
  Eigen::VectorXd worst_sequence;
  Eigen::Index worst_sequence_main = 0;
  std::vector<std::string> worst_characters;  ///< their names, under 8b10b

  std::vector<std::string> missed;  ///< what keeps the target from being met, one line each
  [[nodiscard]] bool target_met() const { return missed.empty(); }
};

/// Scores a setting as it stands: phase, taps and DFE are taken from `settings`.
///
/// Errors: std::invalid_argument when an index or a number of taps does not fit the model.
[[nodiscard]] Score score(const EyeModel& model, const Settings& settings);

/// The link's objective alone: what a search compares.
[[nodiscard]] double objective_height_v(const EyeModel& model, const Settings& settings);

}  // namespace tapwright

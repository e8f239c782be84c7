#pragma once
// Error counts measured over voltage offset and phase, and the noise and jitter that explain them.

#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "tapwright/base/run_control.hpp"
#include "tapwright/eye/eye_model.hpp"

namespace tapwright {

/// One count: slicer threshold `offset_v` off the middle, sampling `phase_ui` after the instant of
/// the setting. A bathtub is a scan at one offset, an error counter a scan of one point.
struct ScanPoint {
  double offset_v = 0.0;
  double phase_ui = 0.0;
  double errors = 0.0;
  double bits = 0.0;
};

/// Lane and points, in the order of the file; lane "" when the table has no such column.
struct EyeScan {
  std::string lane;
  std::vector<ScanPoint> points;
};

/// Columns: errors and bits (or error_ratio and bits), offset_mv and phase_ui (0 when missing), lane.
///
/// Errors: unknown or missing columns; a cell that is no number; errors above bits; with line and
///         column.
[[nodiscard]] Result<std::vector<EyeScan>> parse_eye_scans(std::string_view text, const std::string& file_name);

/// A fitted value with its standard error from the curvature of the likelihood; no error when the
/// scan does not determine the value.
struct FittedValue {
  double value = 0.0;
  std::optional<double> standard_error;
};

/// Gain, noise and jitter by maximum likelihood (Poisson counts), all else as modelled.
///
/// Units:  gain is measured over predicted voltage; noise_v is RMS at the slicer, referred to the
///         scan's own voltage axis divided by the gain (the model's volts); random_ui RMS.
/// Limits: independent symbols; a phase is placed on the nearest sample of the model's grid.
struct ScanFit {
  FittedValue gain;
  FittedValue noise_v;
  FittedValue random_ui;
  double residual = 0.0;  ///< RMS over points of (measured - fitted)/sqrt(fitted count), 1 when perfect
  double residual_before = 0.0;  ///< the same with the model as it was
  int num_points = 0;
  int num_evaluations = 0;
};

/// Errors: std::invalid_argument when the scan has no point with errors between none and all.
[[nodiscard]] ScanFit fit_scan(const EyeModel& model, const Settings& settings, const EyeScan& scan,
                               const RunControl& control = {});

/// Error ratio that the model predicts at one point, independent symbols.
[[nodiscard]] double predicted_error_ratio(const EyeModel& model, const Settings& settings,
                                           double offset_v, double phase_ui);

}  // namespace tapwright

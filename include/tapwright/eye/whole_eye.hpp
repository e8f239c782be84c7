#pragma once
// Error probability over voltage and phase: contours and bathtubs.

#include <Eigen/Core>
#include <optional>

#include "tapwright/eye/eye_model.hpp"

namespace tapwright {

/// One UI around the sampling instant, DFE unchanged.
///
/// Shape:  one_sided, error_ratio and density are (num levels, num phases); phases_ui is (num
///         phases), relative to t_s; levels_v is (num levels), evenly spaced, symmetric about 0.
/// Units:  volts, UI, probabilities.
/// Limits: tails of independent symbols are good to 1e-3 of themselves down to 1e-18, except that
///         noise below 0.8 % of the whole deviation is raised to that: contours move by microvolts.
///         With a line code one_sided counts with it below 0.3; above, and in the density, symbols
///         count as independent; with clock jitter besides, contours are good to half a percent.
struct WholeEye {
  Eigen::VectorXd levels_v;
  Eigen::VectorXd phases_ui;
  Eigen::Index sampling_index = 0;  ///< column of t_s
  /// P(X > signal - v): with the threshold v above the middle of an inner eye, how often the symbol
  /// above it is taken for the one below.
  Eigen::MatrixXd one_sided;
  /// How often that slicer is wrong about either of its two symbols: the mean of one_sided at v and
  /// at -v.
  Eigen::MatrixXd error_ratio;
  /// Probability that the received voltage lies in the level's bin, all symbols equally likely.
  Eigen::MatrixXd density;

  /// The contour of an error probability: half the eye's height per phase, signal - N(P), negative
  /// where closed; empty entries (NaN) where it lies outside the levels.
  [[nodiscard]] Eigen::VectorXd contour_v(double one_sided_probability) const;
  /// error_ratio with the threshold in the middle, over the phases.
  [[nodiscard]] Eigen::VectorXd bathtub_over_phase() const;
  /// error_ratio at t_s, over the thresholds.
  [[nodiscard]] Eigen::VectorXd bathtub_over_level() const;
};

struct WholeEyeGrid {
  int num_levels = 1024;
  /// Half the range of levels; none = wide enough for all but about 1e-9 of what is received.
  std::optional<double> max_level_v;
};

/// Errors: std::invalid_argument when the settings do not fit the model, num_levels < 2 or
///         max_level_v is not > 0.
[[nodiscard]] WholeEye whole_eye(const EyeModel& model, const Settings& settings,
                                 const WholeEyeGrid& grid = {});

}  // namespace tapwright

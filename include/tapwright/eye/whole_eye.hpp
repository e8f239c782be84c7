#pragma once
// Error probability over voltage and phase: contours and bathtubs.

#include <Eigen/Core>
#include <optional>
#include <vector>

#include "tapwright/eye/eye_model.hpp"

namespace tapwright {

/// One UI around the sampling instant, DFE unchanged.
///
/// Shape:  error_ratio and density are (num levels, num phases); phases_ui is (num phases),
/// relative
///         to t_s; levels_v is (num levels), slicer threshold or voltage, evenly spaced, symmetric.
/// Units:  error_ratio(v, phase) is the probability that a slicer with its threshold v volts off
/// the
///         middle of an inner eye decides wrongly between that eye's two levels; density is the
///         probability that the received voltage lies in the level's bin.
/// Limits: independent symbols.
struct WholeEye {
  Eigen::VectorXd levels_v;
  Eigen::VectorXd phases_ui;
  Eigen::MatrixXd error_ratio;
  Eigen::MatrixXd density;
  Eigen::Index sampling_index = 0;  ///< column of t_s

  /// Half the eye's height at an error ratio per phase; negative where closed.
  [[nodiscard]] Eigen::VectorXd contour_v(double one_sided_probability) const;
  /// error_ratio at the threshold 0 over the phases, and at t_s over the thresholds.
  [[nodiscard]] Eigen::VectorXd bathtub_over_phase() const;
  [[nodiscard]] Eigen::VectorXd bathtub_over_level() const;
};

struct WholeEyeGrid {
  int num_levels = 1024;
  std::optional<double> max_level_v;  ///< none = wide enough for every level and 8 sigma
};

[[nodiscard]] WholeEye whole_eye(const EyeModel& model, const Settings& settings,
                                 const WholeEyeGrid& grid = {});

}  // namespace tapwright

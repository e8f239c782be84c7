#pragma once
// One swing, CTLE state and sampling instant, laid out for fast evaluation: everything is linear in
// the knobs that remain.

#include <Eigen/Core>
#include <vector>

#include "tapwright/eye/eye_model.hpp"

namespace tapwright {

/// Where an eye is looked at: every knob that is not a FIR or DFE tap.
struct Place {
  std::size_t swing_index = 0;
  std::size_t ctle_index = 0;
  Eigen::Index phase_samples = 0;  ///< samples after the peak of the state's unequalised pulse
  friend bool operator==(const Place&, const Place&) = default;
};

/// Cursors of one instant as linear functions of the FIR taps, in volts at the actual swing.
///
/// Shape:  cursors is (num cursors, num taps), column-major, so that q = cursors * fir; jitter is
///         the same size, h_J = jitter * fir in volts per UI, or empty without per-symbol jitter.
///         dfe_rows holds, for each DFE tap, its row in `cursors`, or -1 outside the span.
/// Units:  volts; row main_index is the main cursor.
struct CursorMap {
  Eigen::MatrixXd cursors;
  Eigen::MatrixXd jitter;
  Eigen::Index main_index = 0;
  std::vector<Eigen::Index> dfe_rows;
};

/// All that the worst case needs. Holds a pointer to the model, which must outlive it.
struct PlacedEye {
  const EyeModel* model = nullptr;
  Place place;
  /// The sampling instant first, then the other phases under the mask (or under clock jitter): the
  /// score is the least over all of them, the DFE unchanged.
  std::vector<CursorMap> phases;
  double amplitude_v = 0.0;              ///< peak launch amplitude of the swing
  double receiver_noise_v = 0.0;         ///< RMS at the slicer
  double transmitter_noise_ratio = 0.0;  ///< RMS over main cursor, from the signal-to-noise ratio
  double quantile = 0.0;                 ///< Q at the target's error ratio
};

[[nodiscard]] PlacedEye place_eye(const EyeModel& model, const Place& place);

/// sigma_X^2 = (L^2 - 1) / (3 (L - 1)^2): variance of evenly spaced, equally likely levels.
[[nodiscard]] double symbol_variance(int levels);

/// R_LM / (L - 1): half the smallest level spacing over the amplitude; R_LM is 1 for two levels.
[[nodiscard]] double signal_share(const Signal& signal);

/// An aggressor's cursors at its worst phase: x = by_fir * fir, or fixed (by_fir zero) when the
/// aggressor has taps of its own. Its UI may differ from the victim's; samples between the grid's
/// are interpolated linearly.
///
/// Shape: values_v is (num cursors), by_fir (num cursors, num taps). Units: volts.
struct AggressorCursors {
  Eigen::VectorXd values_v;
  Eigen::MatrixXd by_fir;
};
enum class AggressorPhase {
  kLargestSum,       ///< of sum |x_k|: the worst case
  kLargestVariance,  ///< of sum x_k^2: at an error ratio (IEEE 802.3 Annex 93A)
};
[[nodiscard]] AggressorCursors aggressor_cursors(const PlacedEye& eye, std::size_t aggressor,
                                                 const Eigen::VectorXd& fir, AggressorPhase rule);

/// Sum over aggressors of max over phase of sum_k |x_k|, and each of them.
///
/// Shape: fir is (num taps) of the victim. Units: volts at the place's swing.
struct CrosstalkPeak {
  double worst_v = 0.0;
  Eigen::VectorXd supergradient;  ///< (num taps): d worst_v / d fir where it exists
  std::vector<double> each_v;
};
[[nodiscard]] CrosstalkPeak crosstalk_peak(const PlacedEye& eye, const Eigen::VectorXd& fir);

/// Worst-case eye height, independent symbols, at any line code: the classical sum
///
///     2 (q_0 R/(L-1) - sum |r_k| - crosstalk - A_DD sum |h_J,k| - Q sigma - sensitivity)
///
/// with r = q - d at the DFE rows and R the level mismatch; the least over `eye.phases`.
///
/// Shape:  fir (num taps) and dfe_v (num DFE taps) are plain arrays; nothing is allocated unless
///         the link has aggressors.
/// Units:  volts; negative means a closed eye.
/// Source: peak distortion: R. W. Lucky, Bell Syst. Tech. J. 44(4), 1965; math.md section 3.
[[nodiscard]] double worst_case_height_v(const PlacedEye& eye, const double* fir,
                                         const double* dfe_v);

/// The innermost kernel: sum over k of |sum_i cursors(k, i) fir_i| over all rows; 200 cursors x 4
/// taps take well under 200 ns.
[[nodiscard]] double absolute_sum_v(const double* cursors, Eigen::Index num_cursors,
                                    Eigen::Index num_taps, const double* fir);

}  // namespace tapwright

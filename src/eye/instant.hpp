#pragma once
// One instant of one setting, all knobs applied: what score, sampling, objective and whole eye
// share.

#include <optional>
#include <vector>

#include "tapwright/eye/coded_distribution.hpp"
#include "tapwright/eye/distribution.hpp"
#include "tapwright/eye/line_code.hpp"
#include "tapwright/eye/placed_eye.hpp"

namespace tapwright {

/// The cursor map `offset_samples` after a place's sampling instant; between samples, linear.
[[nodiscard]] CursorMap cursor_map(const EyeModel& model, const Place& place, double offset_samples,
                                   double amplitude_v);

[[nodiscard]] Place place_of(const Settings& settings);

/// Errors: std::invalid_argument when an index or a number of taps does not fit.
void require_fit(const EyeModel& model, const Settings& settings);

/// Everything at one instant, in volts.
struct Instant {
  CursorRow residual;            ///< r_k, q_0 at the main index
  Eigen::VectorXd slope;         ///< h_J,k in volts per UI; empty without per-symbol jitter
  Eigen::VectorXd beyond_dfe_v;  ///< DFE taps outside the span, where q is 0
  double signal_v = 0.0;
  double sigma_receiver_v = 0.0;
  double sigma_transmitter_v = 0.0;
  double sigma_jitter_v = 0.0;

  [[nodiscard]] double main_v() const { return residual.values[residual.main_index]; }
  [[nodiscard]] double sigma_v() const;
  /// sum over k != 0 of |r_k|
  [[nodiscard]] double isi_v() const;
};
[[nodiscard]] Instant instant_of(const PlacedEye& eye, const CursorMap& map,
                                 const Eigen::VectorXd& fir, const Eigen::VectorXd& dfe_v);

/// Everything at one instant but clock jitter, as independent terms. The symbols are, in this
/// order: the cursors but the main one, DFE taps beyond the span, the aggressors; the binary terms
/// are A_DD h_J,k.
[[nodiscard]] Disturbance disturbance_of(const PlacedEye& eye, const Instant& instant,
                                         const Eigen::VectorXd& aggressors_v);

/// Aggressors' cursors at the phase of the largest variance, one after the other.
[[nodiscard]] Eigen::VectorXd aggressors_at_error_ratio(const PlacedEye& eye,
                                                        const Eigen::VectorXd& fir);

[[nodiscard]] LineCode code_of(const EyeModel& model);

/// Worst-case interference that the code's sequences can make.
[[nodiscard]] double coded_isi_v(const LineCode& code, const Instant& instant);

/// Samples on either side of t_s under the mask.
[[nodiscard]] Eigen::Index mask_reach(const EyeModel& model);

/// The same with noise of at least 0.8 % of the whole deviation, for where many levels are asked
/// for: contours then stay short, and levels move by theta (0.008 deviation)^2 / 2, some
/// microvolts.
[[nodiscard]] Disturbance with_least_noise(Disturbance disturbance);

/// N(P) and P(X > x) of one instant: interference under the code, crosstalk, jitter, noise; asked
/// many times, it takes `with_least_noise`.
class Tail {
 public:
  Tail(const PlacedEye& eye, const LineCode& code, const Instant& instant,
       const Eigen::VectorXd& aggressors_v, bool many_times = false);
  [[nodiscard]] double exceeded_level_v(double probability);
  [[nodiscard]] double exceedance(double level_v);

 private:
  Disturbance independent_;
  std::optional<CodedTail> coded_;
};

/// The level of disturbance on one side and the clear half height at the error ratio.
struct AtErrorRatio {
  double noise_v = 0.0;  ///< N(P); with clock jitter signal_v - half height
  double height_v = 0.0;
};
/// At `offset_samples` from the place; clock jitter is averaged over.
[[nodiscard]] AtErrorRatio at_error_ratio(const PlacedEye& eye, const LineCode& code,
                                          Eigen::Index offset_samples, const Eigen::VectorXd& fir,
                                          const Eigen::VectorXd& dfe_v,
                                          const Eigen::VectorXd& aggressors_v);

/// Worst-case height at one instant, crosstalk left out.
[[nodiscard]] double worst_case_height_at(const PlacedEye& eye, const LineCode& code,
                                          const CursorMap& map, const Eigen::VectorXd& fir,
                                          const Eigen::VectorXd& dfe_v);

/// Worst-case height over all phases of the placed eye, crosstalk and line code included.
[[nodiscard]] double coded_worst_case_height_v(const PlacedEye& eye, const LineCode& code,
                                               const Eigen::VectorXd& fir,
                                               const Eigen::VectorXd& dfe_v);

/// Height at the error ratio, the least under the mask.
[[nodiscard]] double at_error_ratio_height_v(const PlacedEye& eye, const LineCode& code,
                                             const Eigen::VectorXd& fir,
                                             const Eigen::VectorXd& dfe_v);

}  // namespace tapwright

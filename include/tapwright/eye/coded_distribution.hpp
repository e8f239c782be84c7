#pragma once
// How often intersymbol interference and noise exceed a level when the symbols are those of a code.

#include <Eigen/Core>
#include <memory>

#include "tapwright/eye/distribution.hpp"
#include "tapwright/eye/line_code.hpp"

namespace tapwright {

/// X = push of the code's symbols on the main one + everything independent of them.
///
/// The push is -sum over k != 0 of row_k a_{-k} on a main symbol above the lowest level and + that
/// sum on one below the highest, over the code's random data (LineCode::Section::probability), the
/// main symbol being as likely at each position. So P(X > x) is the error ratio per boundary that a
/// slicer sees: with two levels the bit error ratio at q_0 = x.
///
/// Shape:  row is (num_cursors), UI-spaced, after the DFE; entry main_index is the main cursor.
/// Units:  volts. Limits: aggressors (others.symbols_v) count as independent symbols.
struct CodedDisturbance {
  Eigen::VectorXd row;
  Eigen::Index main_index = 0;
  Disturbance others;
};

/// The tail of X, to be asked often: what the contours need is computed once and kept.
///
/// Method: moment generating function of the sum as a product of transfer matrices over the
/// trellis,
///         M(z) = sum over positions of pi T_1(z) T_2(z) ... 1, and the tail by the trapezoid rule
///         on a vertical line near the saddle point, one of a ladder of lines theta_0 1.3^k.
///         Noise below 1 % of the standard deviation s of X can't end the line. A short row then
///         has few sums and takes the grid, at s/1000 or finer; for a long one the noise is raised
///         to 1 % and the level lowered by what this adds to it, theta (0.01 s)^2 / 2 to first
///         order.
/// Units:  volts.
/// Errors: std::invalid_argument when main_index is not in the row.
/// Limits: within 1e-5 s of N where noise is above 1 % of s, else within 0.2 % of s.
class CodedTail {
 public:
  CodedTail(const LineCode& code, CodedDisturbance disturbance);
  CodedTail(CodedTail&&) noexcept;
  CodedTail& operator=(CodedTail&&) noexcept;
  ~CodedTail();

  /// N(P): the level that X exceeds with probability `probability`.
  /// Errors: std::invalid_argument unless 0 < probability < 0.5.
  [[nodiscard]] double exceeded_level_v(double probability);
  /// P(X > level_v).
  [[nodiscard]] double exceedance(double level_v);

 private:
  class Ladder;
  std::unique_ptr<Ladder> ladder_;
};

[[nodiscard]] double exceeded_level_v(const LineCode& code, const CodedDisturbance& disturbance,
                                      double probability);
[[nodiscard]] double exceedance(const LineCode& code, const CodedDisturbance& disturbance,
                                double level_v);

/// Mean and standard deviation of a sum over a code's random data, exact but for rounding.
struct CodedMoments {
  double mean_v = 0.0;
  double deviation_v = 0.0;
};
/// The sum over k != 0 of row_k a_{-k} whatever the main symbol is, over random data and positions.
[[nodiscard]] CodedMoments coded_moments(const LineCode& code, const Eigen::VectorXd& row,
                                         Eigen::Index main_index);

/// The distribution on a grid, by shifting one array per state along the trellis. The reference:
/// slower by far. Each word's sum and each of the others is split over the two nearest bins so that
/// the mean stays; with B such splits, N errs by at most theta B step^2 / 8 to the safe side where
/// the saddle point is theta, and by B step_v at most.
struct CodedGrid {
  double step_v = 0.0;
  Eigen::Index zero_index = 0;  ///< bin of 0 V
  Eigen::VectorXd mass;         ///< probability at (i - zero_index) step_v, without Gaussian noise
  double sigma_v = 0.0;         ///< noise to be added

  [[nodiscard]] double exceedance(double level_v) const;
  [[nodiscard]] double exceeded_level_v(double probability) const;
};

/// Errors: std::invalid_argument unless step_v > 0 and the grid has at most 2^24 bins.
[[nodiscard]] CodedGrid coded_grid(const LineCode& code, const CodedDisturbance& disturbance,
                                   double step_v);

}  // namespace tapwright

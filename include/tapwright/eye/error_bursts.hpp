#pragma once
// How wrong decisions breed more through the feedback of the DFE.

#include <Eigen/Core>
#include <functional>
#include <optional>

#include "tapwright/eye/eye_model.hpp"

namespace tapwright {

/// A burst begins with a wrong decision after correct ones and ends with the last wrong one before
/// as many correct decisions as the DFE reaches back.
struct ErrorBursts {
  /// Entry n - 1 is the probability that a burst spans n symbols, the first and last wrong one
  /// included.
  Eigen::VectorXd length_probability;
  double longer_probability = 0.0;  ///< that it spans more symbols than there are entries
  double mean_length = 0.0;         ///< symbols
  double mean_errors = 0.0;         ///< wrong decisions in a burst: the error ratio grows by that
  /// Of independent starts: exceedance(main_v).
  double start_probability = 0.0;
  /// Errors per symbol with feedback, mean_errors * start_probability, at most 1/2.
  double error_ratio = 0.0;
};

inline constexpr Eigen::Index kMostBurstTaps = 10;

/// Markov chain over the last decisions, each correct, wrong upward or wrong downward: a wrong
/// decision k symbols ago moves the level by 2 d_k, towards or away from the threshold as the new
/// symbol's sign has it, both equally likely.
///
/// Shape:  dfe_v is (n): the tap at post-cursor k stands at k - 1, zeros where there is none.
///         exceedance(x) is P(disturbance > x) with correct feedback, for any real x.
/// Units:  volts; main_v is q_0.
/// Errors: std::invalid_argument if n > kMostBurstTaps (3^n states), if max_length < 1, or when
///         exceedance gives no probability.
/// Source: the chain is that of, e.g., Kennedy and Anderson, IEEE Trans. Inf. Theory 33(6), 1987
///         (from memory); a single tap of the size of the main cursor gives the well known one
///         half.
/// Limits: two levels, independent symbols; noise and interference independent from symbol to
///         symbol. Taps n with more than 512 different sums take the tail from 513 points, ln P
///         straight between them.
[[nodiscard]] ErrorBursts error_bursts(const std::function<double(double)>& exceedance,
                                       double main_v, const Eigen::VectorXd& dfe_v,
                                       Eigen::Index max_length = 64);

/// The bursts of a setting: the tail is that of its interference, crosstalk, jitter and noise
/// (under its line code, too), clock jitter left out.
///
/// Empty for more than two levels, or when the DFE reaches back more than kMostBurstTaps symbols.
[[nodiscard]] std::optional<ErrorBursts> error_bursts(const EyeModel& model,
                                                      const Settings& settings,
                                                      Eigen::Index max_length = 64);

}  // namespace tapwright

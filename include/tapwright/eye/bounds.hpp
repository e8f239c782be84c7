#pragma once
// How far any equalizer could go, and how long a test must run to prove it.

#include <Eigen/Core>
#include <optional>
#include <vector>

#include "tapwright/eye/eye_model.hpp"

namespace tapwright {

/// Signal-to-noise ratios that no equalizer of the kind passes, as plain ratios (not dB).
///
///     matched filter        2 sigma_X^2 int p^2 dt / eta0
///     folded spectrum       S(f) = (2 sigma_X^2 / (eta0 T)) sum_n |P(f + n/T)|^2
///     linear, unbiased      1 / mean(1/(1+S)) - 1
///     feedback, unbiased    exp(mean ln(1+S)) - 1
///     zero forcing          1 / mean(1/S) and exp(mean ln S), 0 where S has a null
///
/// Source: J. Salz, Bell Syst. Tech. J. 52(8), 1973; J. M. Cioffi, G. P. Dudevoir, M. V. Eyuboglu,
///         G. D. Forney, IEEE Trans. Commun. 43(10), 1995.
struct EqualizerBounds {
  double matched_filter = 0.0;
  double linear = 0.0;    ///< infinite MMSE linear equalizer
  double feedback = 0.0;  ///< infinite MMSE decision-feedback equalizer
  double zero_forcing_linear = 0.0;
  double zero_forcing_feedback = 0.0;
};

/// From a folded spectrum S, sampled evenly over one period of 1/T. Errors: std::invalid_argument
/// if it is empty or holds a negative or non-finite value.
[[nodiscard]] EqualizerBounds bounds_of_folded_spectrum(const Eigen::VectorXd& folded);

/// Of the model's pulse before the receiver's noise filter and CTLE, FIR flat, at a swing. Empty
/// without a noise density or when the pulse was taken at the slicer: then there is no white noise
/// to set it against. Crosstalk and jitter are left out; they can only take away.
[[nodiscard]] std::optional<EqualizerBounds> equalizer_bounds(const EyeModel& model,
                                                              std::size_t swing_index);

/// Infinite-length bounds of a UI-spaced channel p with white noise of variance noise_v2 per sample
/// and symbol variance symbol_variance.
[[nodiscard]] EqualizerBounds discrete_bounds(const Eigen::VectorXd& p, double symbol_variance,
                                              double noise_v2);

/// Minimum mean-square finite equalizer at the receiver: num_forward UI-spaced taps, num_feedback
/// taps on decided symbols, decision delay `delay` symbols.
///
/// Shape: p is (n), UI-spaced channel; forward is (num_forward), feedback is (num_feedback).
struct FiniteEqualizer {
  Eigen::VectorXd forward;
  Eigen::VectorXd feedback;
  double mean_square_error = 0.0;  ///< in units of the symbol, squared
  double unbiased_ratio = 0.0;     ///< symbol_variance / mean_square_error - 1
};
[[nodiscard]] FiniteEqualizer finite_mmse(const Eigen::VectorXd& p, int num_forward,
                                          int num_feedback, int delay, double symbol_variance,
                                          double noise_v2);

/// What a setting makes of it: q_0^2 sigma_X^2 over the mean square of everything else at the
/// slicer (noise, residual cursors, crosstalk, jitter), a plain ratio to set beside the bounds.
[[nodiscard]] double signal_to_distortion(const EyeModel& model, const Settings& settings);

/// Bits that prove an error ratio: were it any larger, a run of that many bits would show at most
/// `errors` errors with a probability below 1 - confidence. Without errors
/// -ln(1 - confidence) / error_ratio.
///
/// Errors: std::invalid_argument unless 0 < error_ratio < 1, 0 < confidence < 1 and errors >= 0.
/// Source: Poisson distribution.
[[nodiscard]] double bits_to_prove(double error_ratio, double confidence, int errors = 0);

}  // namespace tapwright

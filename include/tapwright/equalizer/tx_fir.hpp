#pragma once
// Transmitter FIR: q(t) = sum_i c_i p(t - iT), i < 0 pre-cursor.

#include <Eigen/Core>
#include <optional>
#include <vector>

#include "tapwright/channel/pulse_response.hpp"
#include "tapwright/equalizer/code.hpp"

namespace tapwright {

/// Limits of one tap. With codes, min and max are the least and largest code value.
struct FirTap {
  int position = 0;  ///< 0 = main, negative = pre-cursor
  double min = 0.0;
  double max = 1.0;
  std::vector<Code> codes;    ///< ascending by value; empty = any real value in [min, max]
  bool is_remainder = false;  ///< value is peak_limit - sum |others|; codes are empty
};

/// Limits of the whole FIR.
struct FirLimits {
  std::vector<FirTap> taps;        ///< ascending position, contiguous or not; position 0 is present
  double peak_limit = 1.0;         ///< sum |c_i| may not exceed it
  std::optional<double> min_main;  ///< least main tap, where the device asks for one

  [[nodiscard]] std::size_t main_index() const;  ///< index of position 0 in `taps`
};

/// Whether the tap values keep every limit. Sums are compared in integer multiples of 1e-9, so that
/// decimal steps add up exactly as the register codes do.
[[nodiscard]] bool keeps_limits(const FirLimits& limits, const Eigen::VectorXd& taps);

/// The remainder tap, if there is one, set from the others; otherwise `taps` as given.
[[nodiscard]] Eigen::VectorXd with_remainder(const FirLimits& limits, Eigen::VectorXd taps);

/// q = sum_i c_i p(t - iT) on p's grid. The record grows so that nothing is cut off; the returned
/// sample i + (-first position) * samples_per_ui belongs to p's sample i.
struct FilteredPulse {
  PulseResponse pulse;
  Eigen::Index shift = 0;  ///< index in `pulse` of the time of p's first sample
};
[[nodiscard]] FilteredPulse apply(const FirLimits& limits, const Eigen::VectorXd& taps,
                                  const PulseResponse& pulse);

/// Same on UI-spaced cursors: q_k = sum_i c_i p_{k-i}, p zero outside.
///
/// Shape: p is (num_pre + 1 + num_post) with the main cursor at index num_pre; the result covers
///        k = -(num_pre + m) ... num_post + n for positions -m ... n (m, n >= 0).
struct CursorRow {
  Eigen::VectorXd values;
  Eigen::Index main_index = 0;  ///< entry of k = 0
  [[nodiscard]] double at(Eigen::Index k) const {
    const Eigen::Index i = main_index + k;
    return i >= 0 && i < values.size() ? values[i] : 0.0;
  }
};
[[nodiscard]] CursorRow apply(const FirLimits& limits, const Eigen::VectorXd& taps,
                              const CursorRow& p);

}  // namespace tapwright

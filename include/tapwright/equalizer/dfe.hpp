#pragma once
// Receiver DFE: d_k volts taken off cursor k.

#include <Eigen/Core>
#include <vector>

#include "tapwright/equalizer/code.hpp"

namespace tapwright {

/// Limit of one DFE tap.
struct DfeTap {
  int position = 1;  ///< cursor index, >= 1; floating taps may stand anywhere
  double max = 0.0;  ///< |d_k| <= max, in volts, or in units of q_0 when `relative`
  bool relative = false;
  std::vector<Code> codes;  ///< ascending; same unit as max; empty = any real value in the limit
};

using DfeLimits = std::vector<DfeTap>;  ///< ascending position, no position twice

/// The nearest value that the tap can take to `wanted_v`. With codes, the nearest code (the smaller
/// magnitude of two as near).
[[nodiscard]] double settled_v(const DfeTap& tap, double wanted_v, double main_cursor_v);

/// |d_k| can't be larger than this at the given main cursor (codes looked at), in volts.
[[nodiscard]] double limit_v(const DfeTap& tap, double main_cursor_v);

}  // namespace tapwright

#pragma once
// The receiver's peak input: a convex limit on the FIR, the same in every CTLE state and phase.

#include <span>
#include <vector>

#include "search/sign_sums.hpp"
#include "tapwright/equalizer/device.hpp"

namespace tapwright::search {

/// peak(c) = largest over phases of sum_k |q_in,k| at 1 V launch.
class InputLimit {
 public:
  InputLimit(const FirLimits& limits, const PulseResponse& input);

  /// peak(c), and a subgradient: peak(y) >= slopes y for every y, with equality at c.
  [[nodiscard]] double peak(std::span<const double> taps, std::span<double> slopes) const;
  /// peak(c) of the flat FIR; peak(c) <= sum |c_i| times this.
  [[nodiscard]] double flat_peak() const { return flat_peak_; }

 private:
  std::vector<int> positions_;
  std::vector<std::vector<double>> rows_;  ///< one a phase, with zeros around it
  int front_ = 0;
  int count_ = 0;
  double flat_peak_ = 0.0;
};

}  // namespace tapwright::search

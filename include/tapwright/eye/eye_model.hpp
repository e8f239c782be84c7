#pragma once
// A link made ready for scoring: every pulse computed once, the span chosen.

#include <array>
#include <string>
#include <vector>

#include "tapwright/equalizer/device.hpp"
#include "tapwright/link/link.hpp"

namespace tapwright {

/// A slope in time (jitter) or an eye width needs this many samples per UI; below it jitter is left
/// out, with a warning.
inline constexpr int kLeastSamplesPerUi = 4;

/// Shape: states is (num CTLE states). All pulses at 1 V launch, on one grid.
struct EyeModel {
  Link link;
  std::vector<StatePulses> states;
  PulseResponse input;                 ///< before noise filter and CTLE
  std::array<int, 2> span_ui{8, 119};  ///< UI kept before and after the sampling instant
  double outside_span_v = 0.0;  ///< worst-case sum of what the span leaves out, at 1 V launch
  std::string span_reason;      ///< "as given", or why the program chose it
  std::vector<Diagnostic> warnings;
};

/// Computes the pulses and chooses the span (math.md section 2: where the remaining sum of |p| at
/// UI spacing falls under 0.2 % of the peak, or where a measured record sinks into its own noise).
/// Aggressors' records are cut to as many UI before and after their own strong part.
[[nodiscard]] EyeModel prepare(const Link& link);

/// Sampling instants that a search looks at, in samples after the state's peak, ascending: the UI
/// around the peak and one UI to either side, so that every phase of the grid meets every main
/// index. -1, 0, 1 where there is one sample per UI.
[[nodiscard]] std::vector<Eigen::Index> candidate_phases(const EyeModel& model);

/// The unequalised cursors of one CTLE state and sampling instant within the span, at 1 V launch.
[[nodiscard]] CursorRow victim_row(const EyeModel& model, std::size_t ctle_index,
                                   Eigen::Index phase_samples);

}  // namespace tapwright

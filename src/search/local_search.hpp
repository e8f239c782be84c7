#pragma once
// Better settings near a given one, on the objective itself: for what no bound covers, and to raise
// the incumbent where the bound is loose.

#include <cstdint>
#include <vector>

#include "tapwright/base/run_control.hpp"
#include "tapwright/search/solve.hpp"

namespace tapwright::search {

struct LocalResult {
  Settings settings;
  double height_v = 0.0;
  std::int64_t num_settings = 0;
};

/// From each start: NLopt (COBYLA) over the FIR as real values within the limits, codes nearest to
/// where it ends, then moves of one and two codes, of the CTLE state and the sampling instant while
/// they help. The best of all; the DFE follows every move.
///
/// Errors: std::invalid_argument if there is no start.
[[nodiscard]] LocalResult local_search(const EyeModel& model, const std::vector<Settings>& starts,
                                       const SearchOptions& options, const RunControl& control);

}  // namespace tapwright::search

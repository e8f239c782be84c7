#pragma once
// Every cell of a link (swing, CTLE state, sampling instant) bounded, the open ones searched.

#include <cstdint>
#include <vector>

#include "search/tree.hpp"
#include "tapwright/search/solve.hpp"

namespace tapwright::search {

struct SearchResult {
  std::vector<Settings> ties;  ///< equal in height and ratio; empty if no setting keeps the limits
  double height_v = kImpossible;
  double bound_v = kImpossible;  ///< no setting is above it
  bool proven = false;
  std::int64_t num_cells = 0;
  std::int64_t num_nodes = 0;
  std::int64_t num_settings = 0;
  std::vector<TrailStep> trail;
  std::optional<Certificate> certificate;
};

/// For links that WorstCaseState covers.
[[nodiscard]] SearchResult worst_case_search(const EyeModel& model, const SearchOptions& options,
                                             const RunControl& control);

}  // namespace tapwright::search

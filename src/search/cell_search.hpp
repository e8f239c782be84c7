#pragma once
// Every cell of a link (swing, CTLE state, sampling instant) bounded, the open ones searched.

#include <cstdint>
#include <functional>
#include <memory>
#include <optional>
#include <vector>

#include "search/fir_space.hpp"
#include "search/tree.hpp"
#include "tapwright/search/solve.hpp"

namespace tapwright::search {

/// What makes cells: one for each pair of swing and CTLE state, numbered.
struct CellSource {
  std::size_t num_states = 0;
  std::function<std::unique_ptr<Cell>(std::size_t)> make;  ///< safe to call from several threads
  const FirSpace* space = nullptr;                         ///< the FIR's knobs are the cell's first
  std::int64_t max_nodes = 0;
};

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

[[nodiscard]] SearchResult cell_search(const EyeModel& model, const CellSource& source,
                                       const SearchOptions& options, const RunControl& control);

}  // namespace tapwright::search

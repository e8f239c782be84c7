#pragma once
// Settings that one would rather have than the very best: flat surroundings, or less swing.

#include <cstdint>
#include <optional>
#include <string>
#include <vector>

#include "tapwright/base/run_control.hpp"
#include "tapwright/eye/eye_model.hpp"
#include "tapwright/search/solve.hpp"

namespace tapwright {

struct PlateauOptions {
  double loss_v = 0.0;  ///< eye height that may be given up against the best
  int reach_codes = 1;  ///< codes that every FIR tap, or the CTLE state, may be off
  std::int64_t max_settings = 200'000;  ///< scored at most
};

struct Plateau {
  Settings settings;
  Score score;
  double least_v = 0.0;          ///< least eye height within reach of `settings`
  double least_at_best_v = 0.0;  ///< the same around the best setting
  std::int64_t num_settings = 0;
  bool complete = true;  ///< false when max_settings or a stop request ended the search early
};

/// Among the settings within `loss_v` of the best, the one whose least eye height over all FIR
/// settings at most `reach_codes` codes away in every tap, and over the CTLE states that near, is
/// largest. Phase and DFE follow every move; FIR settings that break a limit can't be set and don't
/// count; taps without codes stay.
///
/// Method: outward from the best, highest first, while something can still be better than the best
///         plateau so far (a setting's own height bounds its plateau). Settings that only lower ones
///         than the loss allows connect to the best are not reached.
/// Units:  volts of eye height under the model's objective.
/// Errors: std::invalid_argument if loss_v < 0 or reach_codes < 1.
[[nodiscard]] Plateau plateau_setting(const EyeModel& model, const Settings& best,
                                      const PlateauOptions& options,
                                      const RunControl& control = {});

struct LeastSwing {
  std::optional<Solution> solution;  ///< none when no swing meets the target
  struct Tried {
    std::size_t swing_index = 0;
    double height_v = 0.0;
    bool met = false;
  };
  std::vector<Tried> tried;  ///< rising swings, up to the one that meets it
};

/// The smallest swing whose best setting meets the link's target. Aggressors without an amplitude of
/// their own move along.
///
/// Units:  volts of eye height under the model's objective.
[[nodiscard]] LeastSwing least_swing_setting(const EyeModel& model,
                                             const SearchOptions& options = {},
                                             const RunControl& control = {});

}  // namespace tapwright

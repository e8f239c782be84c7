#pragma once
// What hardware adaptation reached, against the best.

#include <optional>
#include <string>
#include <vector>

#include "tapwright/base/run_control.hpp"
#include "tapwright/equalizer/knobs.hpp"
#include "tapwright/link/read_back.hpp"
#include "tapwright/search/solve.hpp"
#include "tapwright/study/adaptation.hpp"

namespace tapwright {

struct AuditOptions {
  double tolerance_db = 1.0;            ///< a lane passes while the gap is at most so much
  std::optional<double> tolerance_v;    ///< and at most so much, when given
  std::int64_t max_nodes = 50'000'000;
};

/// One knob of one lane that stands elsewhere than in the best setting.
struct KnobCost {
  Knob knob;
  std::string at;    ///< as read back
  std::string best;  ///< in the best setting
  std::optional<int> codes_off;  ///< read back less best, in steps of the knob's list
  double gain_v = 0.0;           ///< eye won by restoring this knob alone, all else as read back
  double gain_readapted_v = 0.0; ///< the same with DFE and sampling instant following
};

struct AuditedLane {
  std::string lane;
  Settings read_back;              ///< what was not read back is filled in
  std::vector<std::string> filled; ///< which knobs were, and how
  Score predicted;                 ///< at the read-back codes
  Solution best;
  Adaptation adapted;
  double height_v = 0.0;           ///< objective at the read-back codes
  double best_v = 0.0;
  double gap_v = 0.0;
  std::optional<double> gap_db;    ///< empty when an eye is closed
  /// The gap in parts that add up to it, from the best to the read-back codes: swing and CTLE not
  /// the best ones; the objective (mean square instead of eye height); the clock's instant; taps
  /// clipped one by one; rounding to codes; and what remains.
  struct Parts {
    double state_v = 0.0;
    double objective_v = 0.0;
    double phase_v = 0.0;
    double clipping_v = 0.0;
    double quantisation_v = 0.0;
    double unexplained_v = 0.0;
  } parts;
  std::vector<KnobCost> costs;       ///< largest first
  std::vector<std::string> at_rail;  ///< knobs at the end of their range
  std::optional<double> measured_height_v;
  std::optional<double> measured_width_ui;
  bool passed = false;
  std::vector<std::string> remarks;  ///< what stands out, one sentence each
};

struct Audit {
  std::vector<AuditedLane> lanes;
  std::vector<std::string> remarks;            ///< over all lanes
  std::optional<double> rank_correlation;      ///< Spearman's, predicted against measured height
  std::optional<double> gain;                  ///< measured over predicted height, least squares
  std::optional<double> residual_v;            ///< RMS of measured - gain * predicted
  [[nodiscard]] bool passed() const;
};

/// Audits every lane against its own model; models[i] belongs to lanes[i].
///
/// Errors: std::invalid_argument if the sizes differ. Lanes whose table entries do not fit their
///         link give a note and no audit.
[[nodiscard]] Result<Audit> audit_lanes(const std::vector<ReadBackLane>& lanes,
                                        const std::vector<EyeModel>& models,
                                        const std::string& file_name, const AuditOptions& options = {},
                                        const RunControl& control = {});

}  // namespace tapwright

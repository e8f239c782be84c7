#pragma once
// Every point of a study solved, one setting for all, and where to switch between settings.

#include <cstdint>
#include <functional>
#include <optional>
#include <string>
#include <vector>

#include "tapwright/base/run_control.hpp"
#include "tapwright/equalizer/knobs.hpp"
#include "tapwright/search/solve.hpp"
#include "tapwright/study/study_file.hpp"

namespace tapwright {

/// A knob's value and code, by name; the sampling instant is "phase", in UI.
struct KnobValue {
  std::string knob;
  double value = 0.0;
  std::optional<int> code;
  friend bool operator==(const KnobValue&, const KnobValue&) = default;
};

/// One setting that several points are to share: swing, FIR, CTLE and gain. Every receiver keeps
/// its own sampling instant and DFE.
struct SharedSetting {
  std::vector<KnobValue> knobs;
  std::string origin;  ///< where it comes from, for people
  friend bool operator==(const SharedSetting&, const SharedSetting&) = default;
};

/// What is decided before the first point: the settings that every point is tried with.
struct SweepPlan {
  std::vector<SharedSetting> shared;
  /// No setting has a larger least margin over all points, for it has none over those looked at
  /// together. Units: mV of eye height above the target; empty where nothing was proven.
  std::optional<double> shared_bound_mv;
  /// No fewer settings can keep all points at their target; empty where nothing was proven.
  std::optional<std::int64_t> fewest_settings;
  std::string note;  ///< how many points were looked at together, or why none could be
};

/// Eye heights under the link's objective. Units: mV.
struct SweepRecord {
  struct Shared {
    double eye_mv = 0.0;
    bool met = false;
    bool allowed = true;  ///< the receiver's input limit is kept
    friend bool operator==(const Shared&, const Shared&) = default;
  };
  std::int64_t point = 0;
  std::string problem;  ///< why there is no answer; the rest is empty then
  std::vector<KnobValue> knobs;
  double eye_mv = 0.0;
  double target_mv = 0.0;
  std::optional<double> width_ui;
  bool met = false;
  std::string proof;  ///< "proven", "bounded", "exhausted" or "none"
  double gap_mv = 0.0;
  std::vector<Shared> shared;  ///< one for each of the plan's
  friend bool operator==(const SweepRecord&, const SweepRecord&) = default;
};

/// Solves some points together to find settings worth sharing. The answer depends on the study
/// alone, so that every part of a divided run has the same.
[[nodiscard]] SweepPlan plan_sweep(const Study& study, const SearchOptions& options = {},
                                   const RunControl& control = {});

/// One point on its own. Means nothing when the run was stopped meanwhile.
[[nodiscard]] SweepRecord solve_point(const Study& study, const SweepPlan& plan,
                                      std::int64_t point, const SearchOptions& options = {},
                                      const RunControl& control = {});

/// Part `index` (from 0) of `count`: every count-th point.
struct SweepPart {
  std::int64_t index = 0;
  std::int64_t count = 1;
  /// How many of `num_points` belong to it.
  [[nodiscard]] std::int64_t size(std::int64_t num_points) const {
    return index < num_points ? (num_points - index + count - 1) / count : 0;
  }
  [[nodiscard]] std::int64_t point(std::int64_t nth) const { return index + nth * count; }
};

/// Solves the part's points from the `first`-th on and hands over the records in order, whatever
/// the number of threads; no more than a few of them are kept at a time. `take` is called by one
/// thread at a time; when it returns false, or the run is stopped, no further record comes.
///
/// Returns: how many records were taken.
std::int64_t run_points(const Study& study, const SweepPlan& plan, const SweepPart& part,
                        std::int64_t first, const std::function<bool(const SweepRecord&)>& take,
                        const SearchOptions& options = {}, const RunControl& control = {});

/// A stretch of the switch axis.
struct SwitchStretch {
  std::int64_t from = 0;  ///< places on the switch axis, both included
  std::int64_t to = 0;
  std::optional<std::size_t> shared;  ///< index in SweepPlan::shared; none = no shared setting does
  /// Over the points of the stretch; without a shared setting, of each point's own best. Empty
  /// where no point has an answer.
  std::optional<double> least_margin_mv;
  friend bool operator==(const SwitchStretch&, const SwitchStretch&) = default;
};

/// Gathers records as they come; what it keeps does not grow with their number.
class SweepSummary {
 public:
  SweepSummary(const Study& study, const SweepPlan& plan);

  /// Records come in order of point; those left out count as not done, and leave the switch table
  /// out.
  void add(const SweepRecord& record);

  /// Margins are eye heights above the target; empty where no point has an answer.
  struct Yield {
    std::int64_t points = 0;
    std::int64_t met = 0;  ///< each point with its own best setting
    std::vector<std::int64_t> met_shared;  ///< with each shared setting
    std::optional<double> least_margin_mv;
  };
  struct ByValue {
    std::size_t axis = 0;
    std::vector<Yield> values;  ///< empty for an axis that is too long to list
  };
  struct Worst {
    std::int64_t point = 0;
    double margin_mv = 0.0;
  };

  std::int64_t num_points = 0;  ///< of the study
  std::int64_t done = 0;
  std::int64_t failed = 0;  ///< points without an answer
  std::int64_t met = 0;
  std::optional<double> least_margin_mv;
  std::vector<ByValue> by_axis;
  std::vector<Worst> worst;  ///< ten points of least margin, the least first

  struct OfShared {
    std::int64_t met = 0;
    std::int64_t not_allowed = 0;  ///< points whose receiver it would overdrive
    std::optional<double> least_margin_mv;
    std::int64_t least_point = 0;
  };
  std::vector<OfShared> of_shared;
  /// The shared setting whose least margin is largest, of those allowed at most points; none when
  /// no point has been tried.
  [[nodiscard]] std::optional<std::size_t> one_for_all() const;
  /// The least sum of settings that the plan has for the whole switch axis: each stretch goes as
  /// far as any setting carries it, which no other choice of stretches undercuts. Empty unless
  /// every point is done.
  [[nodiscard]] std::vector<SwitchStretch> switch_table() const;
  /// Number of stretches; the table holds the first kMostStretches of them.
  [[nodiscard]] std::int64_t num_stretches() const { return num_stretches_; }
  static constexpr std::size_t kMostStretches = 10000;
  /// Points met when the switch table is followed.
  [[nodiscard]] std::int64_t met_by_table() const { return met_by_table_; }

 private:
  void close_place();
  void close_stretch(std::int64_t to);

  const Study& study_;
  const SweepPlan& plan_;
  // The greedy cover of the switch axis, place by place.
  std::int64_t place_ = 0;
  std::int64_t in_place_ = 0;
  std::vector<bool> holds_;          // shared settings that met every point of this place so far
  std::vector<std::optional<double>> place_least_;  // their least margin here
  std::int64_t stretch_from_ = 0;
  std::vector<bool> alive_;          // that have met every point since stretch_from_
  std::vector<std::optional<double>> stretch_least_;
  std::optional<double> place_own_least_;  // of each point's own best setting
  std::optional<double> stretch_own_least_;
  std::vector<SwitchStretch> stretches_;
  std::int64_t num_stretches_ = 0;
  std::int64_t met_by_table_ = 0;
  bool in_order_ = true;
};

}  // namespace tapwright

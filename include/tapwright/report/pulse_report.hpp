#pragma once
// The pulse response and cursors that a link has.

#include <string>
#include <vector>

#include "tapwright/eye/score.hpp"
#include "tapwright/link/file_quality.hpp"

namespace tapwright {

/// What `pulse` shows: the pulse of one setting before the DFE, its cursors, and the unequalised one.
struct PulseReport {
  const EyeModel* model = nullptr;
  Settings settings;
  Score score;
  PulseResponse unequalised;  ///< of the CTLE state, FIR flat, at the setting's swing
  PulseResponse equalised;    ///< after FIR, same time axis: sample i belongs to the same time
  Eigen::Index sample_index = 0;  ///< the sampling instant in both
  CursorRow before;           ///< cursors of the unequalised pulse at its own peak
  CursorRow after;            ///< cursors after FIR, before the DFE, at the sampling instant
  std::vector<FileQuality> files;  ///< of the link's Touchstone files; the caller measures them
};

[[nodiscard]] PulseReport pulse_report(const EyeModel& model, const Settings& settings);

[[nodiscard]] std::string text_of(const PulseReport& report);
[[nodiscard]] std::string json_of(const PulseReport& report);
/// time_ps, unequalised_mv, equalised_mv; one row a sample, time from the record's start.
[[nodiscard]] std::string csv_of(const PulseReport& report);

}  // namespace tapwright

#pragma once
// The answer of `solve` and `score`, as text for people and as JSON for programs.

#include <optional>
#include <string>
#include <vector>

#include "tapwright/search/solution.hpp"
#include "tapwright/study/knob_sensitivity.hpp"
#include "tapwright/study/parameter_sensitivity.hpp"

namespace tapwright {

/// Everything that a report on one setting shows.
struct SolutionReport {
  const EyeModel* model = nullptr;
  Solution solution;  ///< for a given setting: its settings and score, no proof
  std::vector<KnobSensitivity> sensitivity;
  std::vector<std::string> limited_by;
  std::optional<ParameterStudy> parameters;
};

/// Computes what the report adds to the solution. `model` must outlive the result.
[[nodiscard]] SolutionReport report_on(const EyeModel& model, Solution solution);

/// For a pager or a terminal of 80 columns; plain ASCII, no colour.
[[nodiscard]] std::string text_of(const SolutionReport& report);

/// "format": "tapwright.solution/1", at full precision, two-space indent.
[[nodiscard]] std::string json_of(const SolutionReport& report);

/// Rate, levels and line code in a line.
[[nodiscard]] std::string signal_line(const Link& link);
/// What was proven, in sentences; empty for a setting that was only scored.
[[nodiscard]] std::vector<std::string> proof_lines(const Proof& proof);
/// Span, inputs with the start of their hashes, and every warning.
[[nodiscard]] std::vector<std::string> assumption_lines(const SolutionReport& report);

/// The caution that every report carries.
[[nodiscard]] std::string caution();

}  // namespace tapwright

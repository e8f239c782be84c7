#pragma once
// The best setting of one link, or of several at once.

#include <optional>
#include <vector>

#include "tapwright/base/run_control.hpp"
#include "tapwright/eye/eye_model.hpp"
#include "tapwright/search/solution.hpp"

namespace tapwright {

struct SearchOptions {
  std::optional<ObjectiveKind> objective;  ///< instead of the link's
  bool compare = true;                     ///< score the classical methods too
  bool certificate = false;                ///< keep what proves the answer
  std::int64_t max_nodes = 50'000'000;     ///< boxes of FIR codes; beyond it the answer is `bounded`
  std::optional<double> max_seconds;       ///< likewise; makes the answer depend on the machine
  // Knobs that are not free, such as when an audit asks what the others could still gain.
  std::optional<std::size_t> swing_index;
  std::optional<std::size_t> ctle_index;
  std::optional<Eigen::VectorXd> fir;
};

/// The setting with the largest eye height within the device's limits.
///
/// Equal heights (to 1e-12 V) are ordered by larger ratio, wider eye, smaller swing, then smaller
/// codes, so that the answer is one, whatever the number of threads.
/// Units:  volts.
/// Errors: std::invalid_argument if an option names a knob value that the device does not have.
[[nodiscard]] Solution solve(const EyeModel& model, const SearchOptions& options = {},
                             const RunControl& control = {});

/// One swing, FIR and CTLE setting for several channels of one device: the one whose least eye
/// height over the channels is largest. Every receiver picks its own phase and DFE.
struct JointSolution {
  Settings settings;                      ///< swing, FIR and CTLE; phase and DFE of the binding one
  std::vector<Settings> settings_of;      ///< per channel, with its own phase and DFE
  std::vector<Score> score_of;            ///< per channel
  std::size_t binding_channel = 0;        ///< whose eye is least
  Proof proof;
  std::vector<TrailStep> trail;
};

/// Proven for the worst case of independent symbols at one phase; for other objectives the codes are
/// searched around the best of that case and nothing is claimed. `max_nodes` counts per CTLE state
/// and swing.
///
/// Errors: std::invalid_argument if `models` is empty, if the devices differ in their swings, FIR or
///         number of CTLE states, or the objectives differ.
[[nodiscard]] JointSolution solve_together(const std::vector<EyeModel>& models,
                                           const SearchOptions& options = {},
                                           const RunControl& control = {});

}  // namespace tapwright

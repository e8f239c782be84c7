#pragma once
// What happens to a setting when the channel or the devices are not quite as described.

#include <cstdint>
#include <optional>
#include <string>
#include <vector>

#include "tapwright/base/run_control.hpp"
#include "tapwright/search/solve.hpp"
#include "tapwright/study/knob_sensitivity.hpp"
#include "tapwright/study/link_source.hpp"

namespace tapwright {

/// Something that nobody sets and everybody gets.
///
/// A line is built again from its changed numbers. A measured channel, or a line without the number,
/// is varied by what its smooth loss says: ln|H| fitted by -(k0 + k1 sqrt(f) + k2 f) up to 3/4 of
/// the symbol rate, which leaves reflections out; more length takes that much more of it, in the
/// causal form of IEEE 802.3 Annex 93A, without the delay that a receiver follows anyway.
enum class ParameterKind {
  kLength,
  kLoss,
  kDielectric,
  kImpedance,
  kTemperature,
  kTermination,
  kRiseTime,
  kSwing,
  kTapError,
  kCtleGain,
  kCtlePoles,
  kCrosstalk,
  kNoise,
  kRandomJitter,
  kDualDiracJitter,
  kSlicerOffset,
};

/// A parameter's spread: how far it is taken to stray to either side.
struct Parameter {
  ParameterKind kind = ParameterKind::kLength;
  std::string name;    ///< "channel length"
  std::string spread;  ///< "5 %", "0.5 dB"
  /// Strays to one side only: an offset of either sign costs the same.
  bool one_sided = false;
};

/// The parameters that matter on this link, with their default spreads, each a round figure of
/// common practice that the report states.
[[nodiscard]] std::vector<Parameter> parameters_of(const Link& link, const LinkSource& source);

/// The link with some parameters off by so many spreads each, made from its source.
///
/// Shape:  strays are (num parameters).
/// Errors: notes when the changed link is not valid.
[[nodiscard]] Result<Link> strayed_link(const Link& link, const LinkSource& source,
                                        const std::vector<Parameter>& parameters,
                                        const std::vector<double>& strays);

/// Eye height of a setting on the link as it strays.
struct StrayedEye {
  double fixed_v = 0.0;      ///< every knob stays, the sampling instant relative to the pulse's peak
  double readapted_v = 0.0;  ///< DFE and sampling instant follow
};

struct ParameterSensitivity {
  Parameter parameter;
  std::optional<StrayedEye> low;   ///< change of the eye at minus the spread; empty when one-sided
  std::optional<StrayedEye> high;  ///< at plus the spread; empty when such a link is not valid
  /// Largest loss, DFE and sampling instant following; 0 when nothing hurts.
  [[nodiscard]] double cost_v() const;
};

/// Several parameters off at once.
struct Corner {
  std::string name;
  std::vector<double> strays;
  StrayedEye eye;  ///< heights, not changes
  bool met = false;
};

struct Draws {
  int count = 0;
  std::uint64_t seed = 0;
  int met_fixed = 0;
  int met = 0;  ///< DFE and sampling instant following
  double least_v = 0.0;
  double median_v = 0.0;
};

/// Another setting beside the answer.
struct Alternative {
  std::string name;      ///< "robust"
  Settings settings;
  double height_v = 0.0; ///< on the link as described
  double least_v = 0.0;  ///< over the link and its corners, DFE and sampling instant following
  std::string note;
};

struct ParameterStudy {
  std::vector<ParameterSensitivity> parameters;
  std::vector<Corner> corners;
  std::optional<Draws> draws;
  double nominal_v = 0.0;
  double least_v = 0.0;  ///< of the answer, over the link and its corners
  std::vector<Alternative> alternatives;
  std::vector<std::string> sentences;  ///< what matters most, for people
  std::vector<Diagnostic> notes;
};

struct ParameterStudyOptions {
  int num_draws = 40;
  std::uint64_t seed = 1;
  bool alternatives = true;
};

/// Varies every parameter alone, then all at once: to the corner that hurts and the one that helps,
/// and by seeded normal draws (half the spread a standard deviation, cut at the spread's ends twice
/// over).
///
/// Shape:  `settings` fit the model, which was made from `source`.
/// Units:  volts of eye height under the link's objective.
[[nodiscard]] ParameterStudy parameter_study(const EyeModel& model, const LinkSource& source,
                                             const Settings& settings,
                                             const std::vector<KnobSensitivity>& knobs,
                                             const ParameterStudyOptions& options = {},
                                             const RunControl& control = {});

}  // namespace tapwright

#include "tapwright/search/solve.hpp"

#include <algorithm>
#include <cmath>
#include <stdexcept>
#include <string>
#include <tuple>

#include "search/worst_case_cell.hpp"
#include "search/worst_case_search.hpp"
#include "tapwright/eye/sampling.hpp"
#include "tapwright/search/classical.hpp"

namespace tapwright {
namespace {

using search::SearchResult;

void require_knobs(const EyeModel& model, const SearchOptions& options) {
  const Device& device = model.link.device;
  const auto require = [](const char* knob, std::optional<std::size_t> index, std::size_t count) {
    if (index && *index >= count) {
      throw std::invalid_argument("solve: " + std::string(knob) + " " + std::to_string(*index) +
                                  " of " + std::to_string(count));
    }
  };
  require("swing", options.swing_index, device.transmitter.swings.size());
  require("CTLE state", options.ctle_index, model.states.size());
  const std::size_t num_taps = device.transmitter.fir.taps.size();
  if (options.fir && options.fir->size() != static_cast<Eigen::Index>(num_taps)) {
    throw std::invalid_argument("solve: found " + std::to_string(options.fir->size()) +
                                " FIR tap values for " + std::to_string(num_taps) + " taps");
  }
}

/// The last of the stated order among settings of equal height and ratio: wider eye, smaller swing,
/// smaller codes.
std::size_t pick(const EyeModel& model, const std::vector<Settings>& ties) {
  if (ties.size() == 1) return 0;
  const auto key = [&](const Settings& s) {
    const Score worth = score(model, s);
    const double width_ui = worth.eye_width_worst_case_ui.value_or(0.0);
    return std::tuple(-std::llround(width_ui * 1e9), s.swing_index, s.ctle_index,
                      std::vector<double>(s.fir.begin(), s.fir.end()), std::abs(s.phase_samples),
                      s.phase_samples);
  };
  std::size_t best = 0;
  auto best_key = key(ties[0]);
  for (std::size_t i = 1; i < ties.size(); ++i) {
    auto candidate = key(ties[i]);
    if (candidate < best_key) {
      best_key = std::move(candidate);
      best = i;
    }
  }
  return best;
}

/// A setting for a link on which nothing keeps the limits: least swing, the main tap alone.
Settings resting(const EyeModel& model, const SearchOptions& options) {
  const Device& device = model.link.device;
  Settings settings;
  settings.swing_index = options.swing_index.value_or(0);
  settings.ctle_index = options.ctle_index.value_or(0);
  const FirLimits& fir = device.transmitter.fir;
  settings.fir = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(fir.taps.size()));
  settings.fir[static_cast<Eigen::Index>(fir.main_index())] = fir.peak_limit;
  if (options.fir) settings.fir = *options.fir;
  settings.dfe_v = settled_dfe(model, settings);
  return settings;
}

double objective_of(const Score& score, ObjectiveKind objective) {
  if (objective == ObjectiveKind::kWorstCase) return score.height.worst_case_v;
  return score.height.at_error_ratio_v.value_or(score.height.worst_case_v);
}

Proof proof_of(const SearchResult& result, double height_v) {
  Proof proof;
  proof.num_cells = result.num_cells;
  proof.num_nodes = result.num_nodes;
  proof.num_settings = result.num_settings;
  proof.bound_v = std::max(result.bound_v, height_v);
  proof.gap_v = proof.bound_v - height_v;
  if (result.proven) {
    proof.kind = Proof::Kind::kProven;
    proof.bound_v = height_v;
    proof.gap_v = 0.0;
    proof.reason = "every swing, CTLE state and sampling instant was closed by a bound or a score";
  } else {
    proof.kind = std::isfinite(proof.bound_v) ? Proof::Kind::kBounded : Proof::Kind::kNone;
    proof.reason = "the search was stopped before every box of codes was closed";
  }
  return proof;
}

}  // namespace

Solution solve(const EyeModel& given, const SearchOptions& options, const RunControl& control) {
  require_knobs(given, options);
  std::optional<EyeModel> changed;
  if (options.objective && *options.objective != given.link.objective) {
    changed = given;
    changed->link.objective = *options.objective;
  }
  const EyeModel& model = changed ? *changed : given;

  Solution solution;
  if (options.compare) solution.compared = classical_methods(model);
  SearchResult result = search::worst_case_search(model, options, control);
  solution.trail = std::move(result.trail);
  solution.certificate = std::move(result.certificate);
  if (result.ties.empty()) {
    solution.settings = resting(model, options);
    solution.score = score(model, solution.settings);
    solution.proof.reason = "no setting keeps every limit";
    solution.warnings.push_back(warning_at("", 0, "no setting keeps every limit of the device"));
    return solution;
  }
  solution.settings = result.ties[pick(model, result.ties)];
  solution.score = score(model, solution.settings);
  const double height_v = objective_of(solution.score, model.link.objective);
  solution.proof = proof_of(result, height_v);
  if (model.link.objective != ObjectiveKind::kWorstCase || !search::WorstCaseState::covers(model)) {
    solution.proof.kind = Proof::Kind::kNone;
    solution.proof.reason = "searched as independent symbols in the worst case";
    solution.certificate.reset();
  }
  return solution;
}

}  // namespace tapwright

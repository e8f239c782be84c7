#include "tapwright/search/solve.hpp"

#include <algorithm>
#include <cmath>
#include <limits>
#include <memory>
#include <numeric>
#include <stdexcept>
#include <string>
#include <tuple>

#include "search/cell_search.hpp"
#include "search/local_search.hpp"
#include "search/objective_cell.hpp"
#include "search/worst_case_cell.hpp"
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

std::vector<std::size_t> indices(std::size_t count, std::optional<std::size_t> only) {
  if (only) return {*only};
  std::vector<std::size_t> all(count);
  std::iota(all.begin(), all.end(), std::size_t{0});
  return all;
}

/// A bound on the eye room's objective costs a thousand times what one of signs does.
constexpr std::int64_t kMaxSlowNodes = 4000;

/// The cells of the model's objective searched; an empty result when no bound is known for it.
std::optional<SearchResult> search_cells(const EyeModel& model, const SearchOptions& options,
                                         const RunControl& control) {
  const Device& device = model.link.device;
  const bool fast = model.link.objective == ObjectiveKind::kWorstCase &&
                    search::WorstCaseState::covers(model);
  if (!fast && !search::ObjectiveCell::covers(model)) return std::nullopt;
  const search::FirSpace space(device.transmitter.fir, options.fir);
  std::optional<search::InputLimit> input;
  if (device.receiver.peak_input_v) input.emplace(device.transmitter.fir, model.input);
  const search::InputLimit* input_limit = input ? &*input : nullptr;
  const std::vector<std::size_t> swings =
      indices(device.transmitter.swings.size(), options.swing_index);
  const std::vector<std::size_t> ctle = indices(model.states.size(), options.ctle_index);

  search::CellSource source;
  source.num_states = swings.size() * ctle.size();
  source.space = &space;
  source.max_nodes = options.max_nodes;
  std::vector<std::unique_ptr<search::WorstCaseState>> states;
  if (fast) {
    states.resize(source.num_states);
    parallel_for(static_cast<int>(ctle.size()), control.num_threads, [&](int i) {
      const auto c = static_cast<std::size_t>(i);
      const auto rows = std::make_shared<const search::StateRows>(model.states[ctle[c]].victim);
      for (std::size_t s = 0; s < swings.size(); ++s) {
        states[s * ctle.size() + c] = std::make_unique<search::WorstCaseState>(
            model, space, input_limit, rows, swings[s], ctle[c]);
      }
    });
    source.make = [&](std::size_t s) -> std::unique_ptr<search::Cell> {
      return std::make_unique<search::WorstCaseCell>(*states[s]);
    };
  } else {
    source.max_nodes = std::min(options.max_nodes, kMaxSlowNodes);
    source.make = [&](std::size_t s) -> std::unique_ptr<search::Cell> {
      return std::make_unique<search::ObjectiveCell>(model, space, input_limit,
                                                     swings[s / ctle.size()], ctle[s % ctle.size()]);
    };
  }
  SearchOptions for_cells = options;
  for_cells.certificate = options.certificate && fast;
  return search::cell_search(model, source, for_cells, control);
}

/// Without a bound for the objective itself: what is best in the worst case, as starts.
SearchResult search_by_worst_case(const EyeModel& model, const SearchOptions& options,
                                  const RunControl& control) {
  EyeModel worst = model;
  worst.link.objective = ObjectiveKind::kWorstCase;
  SearchOptions quick = options;
  quick.certificate = false;
  SearchResult result = *search_cells(worst, quick, control);
  result.trail.clear();
  result.proven = false;
  result.bound_v = std::numeric_limits<double>::infinity();
  return result;
}

Proof proof_of(const SearchResult& result, double height_v, bool was_stopped) {
  Proof proof;
  proof.num_cells = result.num_cells;
  proof.num_nodes = result.num_nodes;
  proof.num_settings = result.num_settings;
  if (result.proven) {
    proof.kind = Proof::Kind::kProven;
    proof.bound_v = height_v;
    proof.reason = "every swing, CTLE state and sampling instant was closed by a bound or a score";
  } else if (std::isfinite(result.bound_v)) {
    proof.kind = Proof::Kind::kBounded;
    proof.bound_v = std::max(result.bound_v, height_v);
    proof.gap_v = proof.bound_v - height_v;
    proof.reason = was_stopped ? "the search was stopped before every box of codes was closed"
                               : "boxes of codes stayed open: their bounds lie above the answer";
  } else {
    proof.reason = was_stopped ? "the search was stopped before every cell had a bound"
                               : "no bound is known for this objective on this link";
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
  std::optional<SearchResult> bounded = search_cells(model, options, control);
  SearchResult result = bounded ? std::move(*bounded) : search_by_worst_case(model, options, control);
  solution.trail = std::move(result.trail);
  solution.certificate = std::move(result.certificate);
  if (result.ties.empty()) {
    solution.settings = resting(model, options);
    solution.score = score(model, solution.settings);
    solution.proof.reason = "no setting keeps every limit";
    solution.warnings.push_back(warning_at("", 0, "no setting keeps every limit of the device"));
    return solution;
  }
  if (result.proven) {
    solution.settings = result.ties[pick(model, result.ties)];
  } else {
    std::vector<Settings> starts = result.ties;
    for (const Compared& method : solution.compared) {
      const bool free = !options.fir && !options.ctle_index && !options.swing_index;
      if (free && method.settings) starts.push_back(*method.settings);
    }
    constexpr std::size_t kMaxStarts = 6;
    starts.resize(std::min(starts.size(), kMaxStarts));
    const search::LocalResult local = search::local_search(model, starts, options, control);
    result.num_settings += local.num_settings;
    solution.settings = local.settings;
    const bool worse = bounded && result.height_v > local.height_v;
    if (worse) solution.settings = result.ties[pick(model, result.ties)];
    solution.trail.push_back({"moves around the best", worse ? result.height_v : local.height_v,
                              result.bound_v, result.num_settings});
  }
  solution.score = score(model, solution.settings);
  const double height_v = objective_of(solution.score, model.link.objective);
  const bool was_stopped = control.stopped() || options.max_seconds.has_value();
  solution.proof = proof_of(result, height_v, was_stopped);
  return solution;
}

}  // namespace tapwright

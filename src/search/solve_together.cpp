// One setting for several channels: the states' joint searches, most promising first.

#include <algorithm>
#include <cmath>
#include <limits>
#include <stdexcept>
#include <string>

#include "search/joint_state.hpp"
#include "tapwright/eye/sampling.hpp"
#include "tapwright/search/solve.hpp"

namespace tapwright {
namespace {

using search::JointState;
using search::kImpossible;

constexpr double kTie = 1e-12;
constexpr int kBatch = 4;  // states that share one incumbent: no matter how many threads

bool same_fir(const FirLimits& a, const FirLimits& b) {
  const auto same = [](const FirTap& s, const FirTap& t) {
    return s.position == t.position && s.min == t.min && s.max == t.max && s.codes == t.codes &&
           s.is_remainder == t.is_remainder;
  };
  return a.peak_limit == b.peak_limit && a.min_main == b.min_main &&
         std::equal(a.taps.begin(), a.taps.end(), b.taps.begin(), b.taps.end(), same);
}

void require_one_device(const std::vector<EyeModel>& models) {
  if (models.empty()) throw std::invalid_argument("solve_together: no channel");
  const EyeModel& first = models.front();
  for (std::size_t m = 1; m < models.size(); ++m) {
    const auto differ = [&](const std::string& what) {
      throw std::invalid_argument("solve_together: channel " + std::to_string(m + 1) +
                                  " differs from the first in its " + what);
    };
    const Device& device = models[m].link.device;
    if (device.transmitter.swings != first.link.device.transmitter.swings) differ("swings");
    if (!same_fir(device.transmitter.fir, first.link.device.transmitter.fir)) differ("FIR");
    if (models[m].states.size() != first.states.size()) differ("CTLE states");
    if (models[m].link.objective != first.link.objective) differ("objective");
  }
}

std::vector<std::size_t> indices(std::size_t count, std::optional<std::size_t> only) {
  std::vector<std::size_t> all;
  for (std::size_t i = 0; i < count; ++i) {
    if (!only || *only == i) all.push_back(i);
  }
  return all;
}

struct Start {
  std::size_t swing_index = 0;
  std::size_t ctle_index = 0;
  double glance_v = 0.0;
};

class Together {
 public:
  Together(const std::vector<EyeModel>& models, const SearchOptions& options,
           const RunControl& control)
      : models_(models), options_(options), control_(control) {
    for (const EyeModel& model : models) {
      spaces_.push_back(std::make_unique<search::FirSpace>(model.link.device.transmitter.fir,
                                                           options.fir));
      inputs_.push_back(model.link.device.receiver.peak_input_v
                            ? std::make_unique<search::InputLimit>(
                                  model.link.device.transmitter.fir, model.input)
                            : nullptr);
      rows_.emplace_back();
      for (const StatePulses& state : model.states) {
        rows_.back().push_back(std::make_shared<const search::StateRows>(state.victim));
      }
    }
    if (options.max_seconds) {
      deadline_ = std::chrono::steady_clock::now() +
                  std::chrono::duration_cast<std::chrono::steady_clock::duration>(
                      std::chrono::duration<double>(*options.max_seconds));
    }
  }

  /// Empty settings when nothing keeps every limit.
  JointSolution run() {
    order_states();
    for (std::size_t from = 0; from < starts_.size(); from += batch(from)) {
      search_batch(from, std::min(from + batch(from), starts_.size()));
      control_.report(static_cast<double>(from) / static_cast<double>(starts_.size()),
                      "searching codes for all channels");
    }
    finish();
    return std::move(solution_);
  }

 private:
  // The first state alone: its answer closes most of the others.
  static std::size_t batch(std::size_t from) { return from == 0 ? 1 : kBatch; }

  [[nodiscard]] JointState state_of(const Start& start) const {
    std::vector<std::unique_ptr<search::WorstCaseState>> states;
    std::vector<std::vector<Eigen::Index>> phases;
    for (std::size_t m = 0; m < models_.size(); ++m) {
      states.push_back(std::make_unique<search::WorstCaseState>(
          models_[m], *spaces_[m], inputs_[m].get(), rows_[m][start.ctle_index], start.swing_index,
          start.ctle_index));
      phases.push_back(search::search_phases(models_[m]));
    }
    return {std::move(states), std::move(phases)};
  }

  void order_states() {
    const EyeModel& first = models_.front();
    for (const std::size_t swing :
         indices(first.link.device.transmitter.swings.size(), options_.swing_index)) {
      for (const std::size_t ctle : indices(first.states.size(), options_.ctle_index)) {
        starts_.push_back({swing, ctle, 0.0});
      }
    }
    parallel_for(static_cast<int>(starts_.size()), control_.num_threads, [&](int i) {
      Start& start = starts_[static_cast<std::size_t>(i)];
      start.glance_v = state_of(start).glance();
    });
    std::stable_sort(starts_.begin(), starts_.end(),
                     [](const Start& a, const Start& b) { return a.glance_v > b.glance_v; });
  }

  void search_batch(std::size_t from, std::size_t to) {
    struct Outcome {
      std::vector<std::vector<Settings>> ties;
      search::TreeResult tree;
      std::int64_t num_cells = 0;
    };
    std::vector<Outcome> outcomes(to - from);
    const double incumbent_v = height_v_;
    parallel_for(static_cast<int>(outcomes.size()), control_.num_threads, [&](int i) {
      Outcome& outcome = outcomes[static_cast<std::size_t>(i)];
      JointState state = state_of(starts_[from + static_cast<std::size_t>(i)]);
      const double bound_v = state.scan(incumbent_v);
      outcome.num_cells = state.num_bounded();
      if (bound_v == kImpossible) return;
      search::TreeLimits limits{incumbent_v, options_.max_nodes, false, &control_, deadline_};
      outcome.tree = state.search(limits);
      for (const search::Found& found : outcome.tree.best.ties()) {
        outcome.ties.push_back(state.settings(found.x));
      }
    });
    for (Outcome& outcome : outcomes) {
      solution_.proof.num_cells += outcome.num_cells;
      solution_.proof.num_nodes += outcome.tree.num_nodes;
      solution_.proof.num_settings += outcome.tree.num_settings;
      open_bound_v_ = std::max(open_bound_v_, outcome.tree.open_bound_v);
      if (outcome.ties.empty()) continue;
      const std::int64_t key = search::height_key(outcome.tree.best.height_v());
      const std::int64_t now = height_v_ == kImpossible ? std::numeric_limits<std::int64_t>::min()
                                                        : search::height_key(height_v_);
      if (key < now) continue;
      for (std::vector<Settings>& tie : outcome.ties) {
        if (key > now || solution_.settings_of.empty() || comes_first(tie, solution_.settings_of)) {
          solution_.settings_of = std::move(tie);
        }
        height_v_ = outcome.tree.best.height_v();
      }
    }
    solution_.trail.push_back({from == 0 ? "most promising CTLE state" : "more CTLE states",
                               height_v_, std::numeric_limits<double>::infinity(),
                               solution_.proof.num_settings});
  }

  /// Smaller swing, then smaller codes.
  static bool comes_first(const std::vector<Settings>& a, const std::vector<Settings>& b) {
    const Settings& s = a.front();
    const Settings& t = b.front();
    if (s.swing_index != t.swing_index) return s.swing_index < t.swing_index;
    if (s.ctle_index != t.ctle_index) return s.ctle_index < t.ctle_index;
    return std::lexicographical_compare(s.fir.begin(), s.fir.end(), t.fir.begin(), t.fir.end());
  }

  void finish() {
    Proof& proof = solution_.proof;
    if (solution_.settings_of.empty()) {
      proof.reason = "no setting keeps every limit on every channel";
      return;
    }
    const bool closed = open_bound_v_ == kImpossible || open_bound_v_ <= height_v_ + kTie;
    proof.kind = closed ? Proof::Kind::kProven : Proof::Kind::kBounded;
    proof.bound_v = closed ? height_v_ : open_bound_v_;
    proof.gap_v = proof.bound_v - height_v_;
    proof.reason = closed
                       ? "every swing and CTLE state, with every sampling instant of every channel, "
                         "was closed by a bound or a score"
                       : "the search was stopped before every box of codes was closed";
    solution_.trail.push_back(
        {"branch and bound", height_v_, proof.bound_v, proof.num_settings});
  }

  const std::vector<EyeModel>& models_;
  const SearchOptions& options_;
  const RunControl& control_;
  std::vector<std::unique_ptr<search::FirSpace>> spaces_;
  std::vector<std::unique_ptr<search::InputLimit>> inputs_;
  std::vector<std::vector<std::shared_ptr<const search::StateRows>>> rows_;
  std::vector<Start> starts_;
  std::optional<std::chrono::steady_clock::time_point> deadline_;
  double height_v_ = kImpossible;
  double open_bound_v_ = kImpossible;
  JointSolution solution_;
};

double height_of(const Score& score, ObjectiveKind objective) {
  if (objective == ObjectiveKind::kWorstCase) return score.height.worst_case_v;
  return score.height.at_error_ratio_v.value_or(score.height.worst_case_v);
}

/// The channel's own best phase and DFE for a shared setting.
Settings followed(const EyeModel& model, Settings settings) {
  settings.phase_samples = sampling_instant(model, settings, model.link.sampling).phase_samples;
  settings.dfe_v = best_dfe(model, settings);
  return settings;
}

/// Codes of the FIR and CTLE moved one and two at a time while the least height rises.
void improve(const std::vector<EyeModel>& models, const SearchOptions& options,
             const RunControl& control, JointSolution& solution) {
  const FirLimits& limits = models.front().link.device.transmitter.fir;
  const auto least_of = [&](const Settings& shared, std::vector<Settings>& each) {
    each.assign(models.size(), shared);
    std::vector<double> heights_v(models.size());
    ++solution.proof.num_settings;
    parallel_for(static_cast<int>(models.size()), control.num_threads, [&](int i) {
      const auto m = static_cast<std::size_t>(i);
      each[m] = followed(models[m], shared);
      const std::optional<double> limit_v = models[m].link.device.receiver.peak_input_v;
      const double swing_v =
          models[m].link.device.transmitter.swings[shared.swing_index].value;
      const bool allowed =
          !limit_v || peak_input_v(limits, shared.fir, models[m].input) * swing_v <=
                          *limit_v * (1.0 + 1e-12);
      heights_v[m] = allowed ? objective_height_v(models[m], each[m])
                             : -std::numeric_limits<double>::infinity();
    });
    return *std::min_element(heights_v.begin(), heights_v.end());
  };
  std::vector<Settings> each;
  double best_v = least_of(solution.settings_of.front(), each);
  solution.settings_of = each;
  for (bool moved = true; moved && !control.stopped();) {
    moved = false;
    const Settings here = solution.settings_of.front();
    const auto offer = [&](const Settings& trial) {
      if (!options.fir && !keeps_limits(limits, trial.fir)) return;
      const double height_v = least_of(trial, each);
      if (height_v <= best_v + 1e-9) return;
      best_v = height_v;
      solution.settings_of = each;
      moved = true;
    };
    for (std::size_t i = 0; i < limits.taps.size() && !options.fir; ++i) {
      const std::vector<Code>& codes = limits.taps[i].codes;
      const double value = here.fir[static_cast<Eigen::Index>(i)];
      for (std::size_t c = 0; c < codes.size(); ++c) {
        const bool next = (c + 1 < codes.size() && codes[c + 1].value == value) ||
                          (c > 0 && codes[c - 1].value == value);
        if (!next) continue;
        Settings trial = here;
        trial.fir[static_cast<Eigen::Index>(i)] = codes[c].value;
        trial.fir = with_remainder(limits, trial.fir);
        offer(trial);
      }
    }
    for (const int by : {-1, 1}) {
      const auto ctle = static_cast<std::ptrdiff_t>(here.ctle_index) + by;
      if (options.ctle_index || ctle < 0 ||
          ctle >= static_cast<std::ptrdiff_t>(models.front().states.size())) {
        continue;
      }
      Settings trial = here;
      trial.ctle_index = static_cast<std::size_t>(ctle);
      offer(trial);
    }
  }
  solution.trail.push_back({"moves around the best of the worst case", best_v,
                            std::numeric_limits<double>::infinity(), solution.proof.num_settings});
}

}  // namespace

JointSolution solve_together(const std::vector<EyeModel>& models, const SearchOptions& options,
                             const RunControl& control) {
  require_one_device(models);
  std::vector<EyeModel> changed;
  if (options.objective && *options.objective != models.front().link.objective) {
    changed = models;
    for (EyeModel& model : changed) model.link.objective = *options.objective;
  }
  const std::vector<EyeModel>& chosen = changed.empty() ? models : changed;
  const ObjectiveKind objective = chosen.front().link.objective;
  JointSolution solution = Together(chosen, options, control).run();
  if (solution.settings_of.empty()) return solution;
  const bool covered =
      objective == ObjectiveKind::kWorstCase &&
      std::all_of(chosen.begin(), chosen.end(),
                  [](const EyeModel& model) { return search::WorstCaseState::covers(model); });
  if (!covered) {
    improve(chosen, options, control, solution);
    solution.proof.kind = Proof::Kind::kNone;
    solution.proof.bound_v = solution.proof.gap_v = 0.0;
    solution.proof.reason =
        "codes were moved around the best of independent symbols in the worst case";
  }
  double least_v = std::numeric_limits<double>::infinity();
  for (std::size_t m = 0; m < chosen.size(); ++m) {
    solution.score_of.push_back(score(chosen[m], solution.settings_of[m]));
    const double height_v = height_of(solution.score_of[m], objective);
    if (height_v < least_v) {
      least_v = height_v;
      solution.binding_channel = m;
    }
  }
  solution.settings = solution.settings_of[solution.binding_channel];
  if (solution.proof.kind == Proof::Kind::kProven) solution.proof.bound_v = least_v;
  return solution;
}

}  // namespace tapwright

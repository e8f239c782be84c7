#include "tapwright/search/alternatives.hpp"

#include <algorithm>
#include <cmath>
#include <limits>
#include <map>
#include <memory>
#include <queue>
#include <set>
#include <stdexcept>
#include <utility>

#include "search/joint_state.hpp"
#include "tapwright/eye/sampling.hpp"

namespace tapwright {
namespace {

using search::JointState;

double objective_of(const Score& score, ObjectiveKind objective) {
  if (objective == ObjectiveKind::kWorstCase) return score.height.worst_case_v;
  return score.height.at_error_ratio_v.value_or(score.height.worst_case_v);
}

/// Heights of FIR codes and CTLE states at one swing, phase and DFE at their best; each worked out
/// once.
class Heights {
 public:
  using Key = std::pair<std::size_t, std::vector<int>>;  ///< CTLE state, code of every free tap

  Heights(const EyeModel& model, const Settings& best)
      : model_(model), best_(best), space_(model.link.device.transmitter.fir),
        fast_(model.link.objective == ObjectiveKind::kWorstCase &&
              search::WorstCaseState::covers(model)) {
    const Device& device = model.link.device;
    if (device.receiver.peak_input_v) {
      input_ = std::make_unique<search::InputLimit>(device.transmitter.fir, model.input);
    }
  }

  /// -1 stands for a tap without codes.
  [[nodiscard]] Key key_of(const Settings& settings) const {
    Key key{settings.ctle_index, {}};
    for (int i = 0; i < space_.num_free(); ++i) {
      const std::vector<double>& values = space_.knobs()[static_cast<std::size_t>(i)].values;
      const double wanted = settings.fir[space_.tap_of(i)];
      const auto nearest =
          std::min_element(values.begin(), values.end(), [&](double a, double b) {
            return std::abs(a - wanted) < std::abs(b - wanted);
          });
      key.second.push_back(values.empty() ? -1 : static_cast<int>(nearest - values.begin()));
    }
    return key;
  }

  double at(const Key& key) {
    const auto [place, is_new] = known_.try_emplace(key, search::kImpossible);
    if (is_new) {
      const std::vector<double> x = values_of(key);
      if (fast_) {
        place->second = state_of(key.first).exact(x, search::kImpossible);
      } else {
        Settings settings = settings_from(key, x);
        place->second = follow(settings);
      }
    }
    return place->second;
  }

  [[nodiscard]] Settings settings_of(const Key& key) {
    const std::vector<double> x = values_of(key);
    if (fast_) return state_of(key.first).settings(x).front();
    Settings settings = settings_from(key, x);
    (void)follow(settings);
    return settings;
  }

  [[nodiscard]] std::int64_t num_settings() const {
    return static_cast<std::int64_t>(known_.size());
  }
  [[nodiscard]] const search::FirSpace& space() const { return space_; }

 private:
  [[nodiscard]] std::vector<double> values_of(const Key& key) const {
    std::vector<double> x;
    for (int i = 0; i < space_.num_free(); ++i) {
      const int code = key.second[static_cast<std::size_t>(i)];
      const std::vector<double>& values = space_.knobs()[static_cast<std::size_t>(i)].values;
      x.push_back(code < 0 ? best_.fir[space_.tap_of(i)] : values[static_cast<std::size_t>(code)]);
    }
    return x;
  }

  [[nodiscard]] Settings settings_from(const Key& key, const std::vector<double>& x) const {
    Settings settings = best_;
    settings.ctle_index = key.first;
    std::vector<double> taps(static_cast<std::size_t>(space_.num_taps()));
    space_.expand(x, taps);
    settings.fir =
        Eigen::Map<const Eigen::VectorXd>(taps.data(), static_cast<Eigen::Index>(taps.size()));
    return settings;
  }

  /// Phase and DFE at their best; kImpossible where a limit forbids the setting.
  double follow(Settings& settings) const {
    const Device& device = model_.link.device;
    if (!keeps_limits(device.transmitter.fir, settings.fir)) return search::kImpossible;
    const double swing_v = device.transmitter.swings[settings.swing_index].value;
    if (device.receiver.peak_input_v &&
        peak_input_v(device.transmitter.fir, settings.fir, model_.input) * swing_v >
            *device.receiver.peak_input_v * (1.0 + 1e-12)) {
      return search::kImpossible;
    }
    settings.phase_samples =
        sampling_instant(model_, settings, model_.link.sampling).phase_samples;
    settings.dfe_v = best_dfe(model_, settings);
    return objective_height_v(model_, settings);
  }

  JointState& state_of(std::size_t ctle_index) {
    std::unique_ptr<JointState>& state = states_[ctle_index];
    if (!state) {
      std::vector<std::unique_ptr<search::WorstCaseState>> one;
      one.push_back(std::make_unique<search::WorstCaseState>(
          model_, space_, input_.get(),
          std::make_shared<const search::StateRows>(model_.states[ctle_index].victim),
          best_.swing_index, ctle_index));
      state = std::make_unique<JointState>(
          std::move(one),
          std::vector<std::vector<Eigen::Index>>{search::search_phases(model_)});
      (void)state->scan(search::kImpossible);  // every instant stays
    }
    return *state;
  }

  const EyeModel& model_;
  const Settings& best_;
  search::FirSpace space_;
  bool fast_;
  std::unique_ptr<search::InputLimit> input_;
  std::map<std::size_t, std::unique_ptr<JointState>> states_;
  std::map<Key, double> known_;
};

}  // namespace

Plateau plateau_setting(const EyeModel& model, const Settings& best, const PlateauOptions& options,
                        const RunControl& control) {
  if (!(options.loss_v >= 0.0) || options.reach_codes < 1) {
    throw std::invalid_argument("plateau_setting: loss_v must be >= 0 and reach_codes >= 1");
  }
  using Key = Heights::Key;
  Heights heights(model, best);
  const std::vector<search::Knob>& knobs = heights.space().knobs();

  const auto neighbours_of = [&](const Key& key) {
    std::vector<Key> near;
    std::vector<int> from, to;
    for (std::size_t i = 0; i < knobs.size(); ++i) {
      const int last = static_cast<int>(knobs[i].values.size()) - 1;
      const int code = key.second[i];
      from.push_back(code < 0 ? -1 : std::max(0, code - options.reach_codes));
      to.push_back(code < 0 ? -1 : std::min(last, code + options.reach_codes));
    }
    std::vector<int> code = from;
    for (;;) {
      near.emplace_back(key.first, code);
      std::size_t i = 0;
      while (i < code.size() && ++code[i] > to[i]) {
        code[i] = from[i];
        ++i;
      }
      if (i == code.size()) break;
    }
    const auto num_states = static_cast<int>(model.states.size());
    for (int by = -options.reach_codes; by <= options.reach_codes; ++by) {
      const int ctle = static_cast<int>(key.first) + by;
      if (by != 0 && ctle >= 0 && ctle < num_states) {
        near.emplace_back(static_cast<std::size_t>(ctle), key.second);
      }
    }
    return near;
  };

  const Key start = heights.key_of(best);
  const double enough_v = heights.at(start) - options.loss_v;
  struct Open {
    double height_v = 0.0;
    Key key;
    bool operator<(const Open& other) const {
      return height_v != other.height_v ? height_v < other.height_v : key > other.key;
    }
  };
  std::priority_queue<Open> open;
  std::set<Key> seen{start};
  open.push({heights.at(start), start});
  Plateau plateau;
  Key winner = start;
  plateau.least_v = -std::numeric_limits<double>::infinity();
  while (!open.empty() && open.top().height_v > plateau.least_v) {
    if (control.stopped() || heights.num_settings() >= options.max_settings) {
      plateau.complete = false;
      break;
    }
    const Open here = open.top();
    open.pop();
    double least_v = here.height_v;
    for (Key& near : neighbours_of(here.key)) {
      const double height_v = heights.at(near);
      if (height_v == search::kImpossible) continue;
      least_v = std::min(least_v, height_v);
      if (height_v >= enough_v && seen.insert(near).second) {
        open.push({height_v, std::move(near)});
      }
    }
    if (here.key == start) plateau.least_at_best_v = least_v;
    if (least_v > plateau.least_v) {
      plateau.least_v = least_v;
      winner = here.key;
    }
  }
  plateau.settings = heights.settings_of(winner);
  plateau.score = score(model, plateau.settings);
  plateau.num_settings = heights.num_settings();
  return plateau;
}

LeastSwing least_swing_setting(const EyeModel& model, const SearchOptions& options,
                               const RunControl& control) {
  LeastSwing result;
  const ObjectiveKind objective = options.objective.value_or(model.link.objective);
  const std::size_t num_swings = model.link.device.transmitter.swings.size();
  for (std::size_t swing = 0; swing < num_swings && !control.stopped(); ++swing) {
    SearchOptions with_swing = options;
    with_swing.swing_index = swing;
    Solution solution = solve(model, with_swing, control);
    const bool met = solution.score.target_met();
    result.tried.push_back({swing, objective_of(solution.score, objective), met});
    if (met) {
      result.solution = std::move(solution);
      return result;
    }
  }
  return result;
}

}  // namespace tapwright

// Which settings are worth sharing: found from some of a study's points, looked at together.

#include <algorithm>
#include <cmath>
#include <optional>

#include "study/model_window.hpp"
#include "study/shared_setting.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/eye/score.hpp"
#include "tapwright/study/knob_sensitivity.hpp"
#include "tapwright/study/sweep.hpp"

namespace tapwright {
namespace {

constexpr std::int64_t kMostPlaces = 9;        // on the switch axis
constexpr std::int64_t kMostCombinations = 6;   // of the other axes, at one place
constexpr int kMostRounds = 24;                 // of looking at more points together
constexpr double kSameHeight_v = 1e-9;
constexpr double kImpossible_v = -1e9;

/// Ends of an axis with numbers; of an axis with names every value while there are few.
std::vector<std::int64_t> telling_places(const Axis& axis) {
  const std::int64_t size = axis.size();
  if (size == 1) return {0};
  if (!axis.has_names()) return {0, size - 1};
  constexpr std::int64_t kMostNames = 6;
  std::vector<std::int64_t> out;
  const std::int64_t num = std::min(size, kMostNames);
  for (std::int64_t i = 0; i < num; ++i) out.push_back(i * (size - 1) / (num - 1));
  return out;
}

/// A point that stands for others.
struct Scout {
  std::int64_t place = 0;  ///< index in `places` below
  EyeModel model;
};

/// What one setting does for some scouts.
struct Together {
  std::vector<KnobValue> knobs;
  double least_v = 0.0;             ///< over the scouts it was made for
  std::optional<double> bound_v;    ///< which no setting's least eye exceeds
};

class Planner {
 public:
  Planner(const Study& study, const SearchOptions& options, const RunControl& control)
      : study_(study), options_(options), control_(control) {
    options_.compare = false;
    options_.certificate = false;
  }

  SweepPlan plan() {
    choose_points();
    prepare_scouts();
    if (scouts_.empty()) {
      plan_.note = "no point that was looked at gives a valid link";
      return std::move(plan_);
    }
    for (const Scout& scout : scouts_) {
      if (same_knobs(scouts_.front().model.link.device, scout.model.link.device)) continue;
      plan_.note = "the axes change the codes of the knobs, so that no setting can be shared";
      return std::move(plan_);
    }
    cover();
    plan_.note = "shared settings were sought on " + std::to_string(scouts_.size()) +
                 (std::cmp_equal(scouts_.size(), study_.num_points()) ? " points: all of them"
                                                                      : " points") ;
    return std::move(plan_);
  }

 private:
  void choose_points() {
    const std::int64_t size = study_.axes[study_.switch_axis].size();
    const std::int64_t num = std::min(size, kMostPlaces);
    for (std::int64_t i = 0; i < num; ++i) {
      places_.push_back(num == 1 ? 0 : i * (size - 1) / (num - 1));
    }
    std::vector<std::vector<std::int64_t>> combinations{std::vector<std::int64_t>(study_.axes.size(), 0)};
    for (std::size_t a = 0; a < study_.axes.size(); ++a) {
      if (a == study_.switch_axis) continue;
      std::vector<std::vector<std::int64_t>> more;
      for (const auto& one : combinations) {
        for (const std::int64_t place : telling_places(study_.axes[a])) {
          more.push_back(one);
          more.back()[a] = place;
        }
      }
      combinations = std::move(more);
    }
    const auto all = static_cast<std::int64_t>(combinations.size());
    const std::int64_t kept = std::min(all, kMostCombinations);
    for (const std::int64_t place : places_) {
      for (std::int64_t i = 0; i < kept; ++i) {
        auto at = combinations[static_cast<std::size_t>(kept == 1 ? 0 : i * (all - 1) / (kept - 1))];
        at[study_.switch_axis] = place;
        points_.push_back(std::move(at));
      }
    }
    per_place_ = kept;
  }

  void prepare_scouts() {
    std::vector<std::optional<EyeModel>> models(points_.size());
    parallel_for(static_cast<int>(points_.size()), control_.num_threads, [&](int i) {
      if (control_.stopped()) return;
      const auto at = static_cast<std::size_t>(i);
      const Result<Link> link = read_link(study_.link, study_.changes(points_[at]));
      if (link) models[at] = within_span(prepare(*link.value));
    });
    for (std::size_t i = 0; i < models.size(); ++i) {
      if (!models[i]) continue;
      scouts_.push_back({static_cast<std::int64_t>(i) / per_place_, std::move(*models[i])});
    }
  }

  double height_at(const Scout& scout, const std::vector<KnobValue>& knobs) const {
    const auto carried = carried_over(knobs, scout.model.link.device);
    if (!carried || !keeps_input_limit(scout.model, *carried)) return kImpossible_v;
    return objective_height_v(scout.model, readapted(scout.model, *carried));
  }

  /// The setting whose least eye over the scouts of places [from, to] is largest. Points that do not
  /// bind are left out of the search and only looked at afterwards: what bounds some bounds all.
  Together best_for(std::int64_t from, std::int64_t to) {
    std::vector<const Scout*> wanted;
    for (const Scout& scout : scouts_) {
      if (scout.place >= from && scout.place <= to) wanted.push_back(&scout);
    }
    Together best;
    if (wanted.empty()) return best;
    std::vector<const Scout*> binding{wanted.front()};
    if (wanted.size() > 1) binding.push_back(wanted.back());
    best.least_v = kImpossible_v;
    for (int round = 0; round < kMostRounds && !control_.stopped(); ++round) {
      std::vector<EyeModel> models;
      for (const Scout* scout : binding) models.push_back(scout->model);
      const JointSolution joint = solve_together(models, options_, control_);
      if (joint.settings_of.empty()) {  // nothing keeps the limits of all of them
        if (!control_.stopped()) best.bound_v = kImpossible_v;
        break;
      }
      const std::vector<KnobValue> knobs =
          shared_knobs(models.front().link.device, joint.settings);
      if (joint.proof.kind == Proof::Kind::kProven || joint.proof.kind == Proof::Kind::kBounded) {
        best.bound_v = best.bound_v ? std::min(*best.bound_v, joint.proof.bound_v) : joint.proof.bound_v;
      }
      std::vector<double> heights_v(wanted.size());
      parallel_for(static_cast<int>(wanted.size()), control_.num_threads, [&](int i) {
        const auto at = static_cast<std::size_t>(i);
        heights_v[at] = height_at(*wanted[at], knobs);
      });
      const auto least = std::min_element(heights_v.begin(), heights_v.end());
      if (*least > best.least_v) {
        best.least_v = *least;
        best.knobs = knobs;
      }
      if (best.bound_v && best.least_v >= *best.bound_v - kSameHeight_v) break;
      const Scout* worst = wanted[static_cast<std::size_t>(least - heights_v.begin())];
      if (std::find(binding.begin(), binding.end(), worst) != binding.end()) break;
      binding.push_back(worst);
    }
    return best;
  }

  double target_v(std::int64_t from, std::int64_t to) const {
    double target = 0.0;
    for (const Scout& scout : scouts_) {
      if (scout.place < from || scout.place > to) continue;
      target = std::max(target, scout.model.link.target.eye_height_v);
    }
    return target;
  }

  bool one_target() const {
    return std::all_of(scouts_.begin(), scouts_.end(), [&](const Scout& s) {
      return s.model.link.target.eye_height_v ==
             scouts_.front().model.link.target.eye_height_v;
    });
  }

  bool holds(const Together& together, std::int64_t from, std::int64_t to) const {
    return together.least_v > 0.0 && together.least_v >= target_v(from, to);
  }

  void keep(const Together& together, std::int64_t from, std::int64_t to) {
    if (together.knobs.empty()) return;
    for (const SharedSetting& known : plan_.shared) {
      if (known.knobs == together.knobs) return;
    }
    const Axis& axis = study_.axes[study_.switch_axis];
    const auto at = [&](std::int64_t i) {
      const AxisValue value = axis.at(places_[static_cast<std::size_t>(i)]);
      return value.label + (axis.unit().empty() || !value.number ? "" : " " + axis.unit());
    };
    plan_.shared.push_back({together.knobs, from == to ? "best at " + axis.name() + " " + at(from)
                                                       : "best from " + axis.name() + " " + at(from) +
                                                             " to " + at(to)});
  }

  /// Stretches from the left, each as long as one setting holds; where a bound shows that none holds
  /// further, no table can do with fewer.
  void cover() {
    const auto last = static_cast<std::int64_t>(places_.size()) - 1;
    const Together all = best_for(0, last);
    keep(all, 0, last);
    if (one_target() && all.bound_v && *all.bound_v > kImpossible_v) {
      plan_.shared_bound_mv = v_to_mv(*all.bound_v - scouts_.front().model.link.target.eye_height_v);
    }
    bool proven = true;
    std::int64_t num = 0;
    std::vector<std::int64_t> ends;
    for (std::int64_t from = 0; from <= last && !control_.stopped();) {
      // Whether any setting holds as far as `to` can only change once, from yes to no.
      std::int64_t good = from - 1;
      std::int64_t bad = last + 1;
      Together best;
      Together beyond;
      for (std::int64_t to = last; bad - good > 1; to = good + (bad - good) / 2) {
        Together tried = from == 0 && to == last ? all : best_for(from, to);
        if (holds(tried, from, to)) {
          good = to;
          best = std::move(tried);
        } else {
          bad = to;
          beyond = std::move(tried);
        }
      }
      ++num;
      if (bad <= last && !(beyond.bound_v && !(*beyond.bound_v >= target_v(from, bad)))) proven = false;
      if (good < from) {  // no setting holds even here
        keep(beyond, from, from);
        ends.push_back(from);
        from = bad + 1;
        proven = false;
        continue;
      }
      keep(best, from, good);
      ends.push_back(good);
      from = good + 1;
    }
    if (proven && one_target()) plan_.fewest_settings = num;
    // The last place of one stretch and the first of the next were looked at, what lies between them
    // was not: a setting for both stands by.
    for (const std::int64_t end : ends) {
      if (end < last && !control_.stopped()) keep(best_for(end, end + 1), end, end + 1);
    }
  }

  const Study& study_;
  SearchOptions options_;
  const RunControl& control_;
  SweepPlan plan_;
  std::vector<std::int64_t> places_;  // on the switch axis
  std::vector<std::vector<std::int64_t>> points_;
  std::int64_t per_place_ = 1;
  std::vector<Scout> scouts_;
};

}  // namespace

SweepPlan plan_sweep(const Study& study, const SearchOptions& options, const RunControl& control) {
  return Planner(study, options, control).plan();
}

}  // namespace tapwright

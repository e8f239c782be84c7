#include "tapwright/study/sweep.hpp"

#include <algorithm>
#include <cmath>
#include <condition_variable>
#include <map>
#include <mutex>
#include <thread>
#include <utility>

#include "study/shared_setting.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/eye/score.hpp"
#include "tapwright/study/knob_sensitivity.hpp"

namespace tapwright {
namespace {

double objective_of(const Link& link, const EyeHeights& height) {
  return link.objective == ObjectiveKind::kWorstCase
             ? height.worst_case_v
             : height.at_error_ratio_v.value_or(height.worst_case_v);
}

const char* name_of(Proof::Kind kind) {
  switch (kind) {
    case Proof::Kind::kProven: return "proven";
    case Proof::Kind::kBounded: return "bounded";
    case Proof::Kind::kExhausted: return "exhausted";
    case Proof::Kind::kNone: break;
  }
  return "none";
}

/// What one setting is worth at a point, phase and DFE adapted. The whole score is taken only where
/// the target asks for a width.
SweepRecord::Shared shared_outcome(const EyeModel& model, const Settings& setting) {
  const Settings here = readapted(model, setting);
  const double height_v = objective_height_v(model, here);
  const Target& target = model.link.target;
  const bool allowed = keeps_input_limit(model, setting);
  bool met = allowed && height_v > 0.0 && height_v >= target.eye_height_v;
  if (met && target.eye_width_ui > 0.0) met = score(model, here).target_met();
  return {v_to_mv(height_v), met, allowed};
}

/// One line out of the notes of a point that can't be used.
std::string first_error(const std::vector<Diagnostic>& notes) {
  for (const Diagnostic& note : notes) {
    if (note.severity == Diagnostic::Severity::kError) return to_string(note);
  }
  return "the link can't be used";
}

using Least = std::optional<double>;

Least least(const Least& a, const Least& b) { return !a ? b : !b ? a : std::min(*a, *b); }

}  // namespace

SweepRecord solve_point(const Study& study, const SweepPlan& plan, std::int64_t point,
                        const SearchOptions& options, const RunControl& control) {
  SweepRecord record;
  record.point = point;
  const Result<Link> link = read_link(study.link, study.changes(study.places(point)));
  if (!link) {
    record.problem = first_error(link.notes);
    return record;
  }
  const EyeModel model = prepare(*link.value);
  SearchOptions alone = options;
  alone.compare = false;
  alone.certificate = false;
  const Solution best = solve(model, alone, control);
  record.knobs = knob_values(model, best.settings);
  record.eye_mv = v_to_mv(objective_of(model.link, best.score.height));
  record.target_mv = v_to_mv(model.link.target.eye_height_v);
  record.width_ui = model.link.objective == ObjectiveKind::kWorstCase
                        ? best.score.eye_width_worst_case_ui
                        : best.score.eye_width_ui;
  record.met = best.score.target_met();
  record.proof = name_of(best.proof.kind);
  record.gap_mv = best.proof.kind == Proof::Kind::kNone ? 0.0 : v_to_mv(best.proof.gap_v);
  for (const SharedSetting& shared : plan.shared) {
    const auto carried = carried_over(shared.knobs, model.link.device);
    if (!carried) {
      record.problem = "this point's device can't take the shared setting " + shown(shared.knobs);
      return record;
    }
    record.shared.push_back(shared_outcome(model, *carried));
  }
  return record;
}

std::int64_t run_points(const Study& study, const SweepPlan& plan, const SweepPart& part,
                        std::int64_t first, const std::function<bool(const SweepRecord&)>& take,
                        const SearchOptions& options, const RunControl& control) {
  // Workers may run ahead of the record that is due by this much and no more.
  const std::int64_t kAhead = 8 * std::max(1, control.num_threads);
  const std::int64_t size = part.size(study.num_points());
  std::mutex mutex;
  std::condition_variable moved;
  std::map<std::int64_t, SweepRecord> waiting;
  std::int64_t next = first;
  std::int64_t due = first;
  bool ended = false;
  std::exception_ptr failure;

  const RunControl alone{control.stop, {}, 1};
  const auto work = [&](int) {
    for (;;) {
      std::int64_t nth = 0;
      {
        std::unique_lock lock(mutex);
        moved.wait(lock, [&] { return ended || next >= size || next < due + kAhead; });
        if (ended || next >= size || control.stopped()) {
          ended = ended || control.stopped();
          moved.notify_all();
          return;
        }
        nth = next++;
      }
      SweepRecord record;
      try {
        record = solve_point(study, plan, part.point(nth), options, alone);
      } catch (...) {
        const std::scoped_lock lock(mutex);
        if (!failure) failure = std::current_exception();
        ended = true;
        moved.notify_all();
        return;
      }
      const std::scoped_lock lock(mutex);
      if (ended || control.stopped()) return;
      waiting.emplace(nth, std::move(record));
      while (!ended && !waiting.empty() && waiting.begin()->first == due) {
        ended = !take(waiting.begin()->second);
        if (ended) break;
        waiting.erase(waiting.begin());
        ++due;
        control.report(static_cast<double>(due) / static_cast<double>(size),
                       "point " + std::to_string(due) + " of " + std::to_string(size));
      }
      moved.notify_all();
    }
  };
  const int num_threads = std::max(1, control.num_threads);
  parallel_for(num_threads, num_threads, work);
  if (failure) std::rethrow_exception(failure);
  return due - first;
}

SweepSummary::SweepSummary(const Study& study, const SweepPlan& plan)
    : num_points(study.num_points()),
      of_shared(plan.shared.size()),
      study_(study),
      plan_(plan),
      holds_(plan.shared.size(), true),
      place_least_(plan.shared.size()),
      alive_(plan.shared.size(), true),
      stretch_least_(plan.shared.size()) {
  constexpr std::int64_t kLongestListed = 1000;
  for (std::size_t a = 0; a < study.axes.size(); ++a) {
    const std::int64_t size = study.axes[a].size();
    by_axis.push_back({a, {}});
    if (size > 1 && size <= kLongestListed) {
      by_axis.back().values.resize(static_cast<std::size_t>(size));
    }
  }
}

void SweepSummary::add(const SweepRecord& record) {
  in_order_ = in_order_ && record.point == done;
  ++done;
  const bool answered = record.problem.empty();
  const double margin_mv = record.eye_mv - record.target_mv;
  if (answered) {
    met += record.met ? 1 : 0;
    least_margin_mv = least(least_margin_mv, margin_mv);
    const auto later = std::upper_bound(
        worst.begin(), worst.end(), margin_mv,
        [](double margin, const Worst& w) { return margin < w.margin_mv; });
    worst.insert(later, {record.point, margin_mv});
    if (worst.size() > 10) worst.pop_back();
  } else {
    ++failed;
  }
  const std::vector<std::int64_t> places = study_.places(record.point);
  for (ByValue& by : by_axis) {
    if (by.values.empty()) continue;
    Yield& yield = by.values[static_cast<std::size_t>(places[by.axis])];
    ++yield.points;
    if (!answered) continue;
    yield.met += record.met ? 1 : 0;
    yield.least_margin_mv = least(yield.least_margin_mv, margin_mv);
    yield.met_shared.resize(plan_.shared.size(), 0);
    for (std::size_t s = 0; s < record.shared.size(); ++s) {
      yield.met_shared[s] += record.shared[s].met ? 1 : 0;
    }
  }
  for (std::size_t s = 0; s < plan_.shared.size(); ++s) {
    if (!answered) {
      holds_[s] = false;
      continue;
    }
    const double shared_mv = record.shared[s].eye_mv - record.target_mv;
    OfShared& of = of_shared[s];
    of.met += record.shared[s].met ? 1 : 0;
    of.not_allowed += record.shared[s].allowed ? 0 : 1;
    if (!of.least_margin_mv || shared_mv < *of.least_margin_mv) {
      of.least_margin_mv = shared_mv;
      of.least_point = record.point;
    }
    if (!record.shared[s].met) holds_[s] = false;
    place_least_[s] = least(place_least_[s], shared_mv);
  }
  if (answered) place_own_least_ = least(place_own_least_, margin_mv);
  if (in_order_ && ++in_place_ == study_.points_per_switch_value()) close_place();
}

void SweepSummary::close_place() {
  const std::size_t num = plan_.shared.size();
  const auto any = [](const std::vector<bool>& flags) {
    return std::find(flags.begin(), flags.end(), true) != flags.end();
  };
  std::vector<bool> both(num, false);
  for (std::size_t s = 0; s < num; ++s) both[s] = alive_[s] && holds_[s];
  const bool in_gap = place_ > stretch_from_ && !any(alive_);
  if (place_ > stretch_from_ && (in_gap ? any(holds_) : !any(both))) {
    close_stretch(place_ - 1);
    stretch_from_ = place_;
  }
  if (place_ == stretch_from_) {
    alive_ = holds_;
    stretch_least_ = place_least_;
    stretch_own_least_ = place_own_least_;
  } else {
    alive_ = both;
    for (std::size_t s = 0; s < num; ++s) {
      stretch_least_[s] = least(stretch_least_[s], place_least_[s]);
    }
    stretch_own_least_ = least(stretch_own_least_, place_own_least_);
  }
  if (place_ == study_.axes[study_.switch_axis].size() - 1) close_stretch(place_);
  ++place_;
  in_place_ = 0;
  holds_.assign(num, true);
  place_least_.assign(num, {});
  place_own_least_.reset();
}

void SweepSummary::close_stretch(std::int64_t to) {
  // Of the settings that carry the whole stretch, the one with most to spare.
  SwitchStretch stretch{stretch_from_, to, {}, stretch_own_least_};
  for (std::size_t s = 0; s < alive_.size(); ++s) {
    if (!alive_[s]) continue;
    if (!stretch.shared || *stretch_least_[s] > *stretch.least_margin_mv) {
      stretch.shared = s;
      stretch.least_margin_mv = stretch_least_[s];
    }
  }
  // A stretch without a setting counts nothing: a table has to hold for all points of a place.
  if (stretch.shared) met_by_table_ += (to - stretch_from_ + 1) * study_.points_per_switch_value();
  if (stretches_.size() < kMostStretches) stretches_.push_back(stretch);
  ++num_stretches_;
}

std::optional<std::size_t> SweepSummary::one_for_all() const {
  if (done == failed) return std::nullopt;
  std::optional<std::size_t> best;
  for (std::size_t s = 0; s < of_shared.size(); ++s) {
    const auto worth = [&](std::size_t i) {
      return std::pair(-of_shared[i].not_allowed, *of_shared[i].least_margin_mv);
    };
    if (!best || worth(s) > worth(*best)) best = s;
  }
  return best;
}

std::vector<SwitchStretch> SweepSummary::switch_table() const {
  if (!in_order_ || done != num_points) return {};
  return stretches_;
}

}  // namespace tapwright

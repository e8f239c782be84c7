#include "search/objective_cell.hpp"

#include <algorithm>
#include <cmath>
#include <cstddef>

#include "tapwright/eye/line_code.hpp"
#include "tapwright/eye/sampling.hpp"

namespace tapwright::search {
namespace {

constexpr double kRounding = 1e-12;

std::size_t at(Eigen::Index i) { return static_cast<std::size_t>(i); }

bool one_phase(const EyeModel& model) {
  return model.link.mask_width_ui == 0.0 && model.link.jitter.common_random_ui == 0.0;
}

}  // namespace

bool ObjectiveCell::covers(const EyeModel& model) {
  return objective_at(model, model.link.objective, {}).upper_bound_v != nullptr;
}

ObjectiveCell::ObjectiveCell(const EyeModel& model, const FirSpace& space, const InputLimit* input,
                             std::size_t swing_index, std::size_t ctle_index)
    : model_(&model),
      space_(&space),
      input_(model.link.device.receiver.peak_input_v ? input : nullptr),
      place_{swing_index, ctle_index, 0},
      amplitude_v_(model.link.device.transmitter.swings[swing_index].value),
      knobs_(space.knobs()),
      taps_(at(space.num_taps())),
      by_taps_(taps_.size()) {
  const Link& link = model.link;
  settles_ = one_phase(model) && link.signal.line_code.kind == LineCodeKind::kNone;
  is_concave_ = link.objective == ObjectiveKind::kWorstCase && link.sampling == SamplingRule::kBest;
  // |q_0| is at most the sum of |taps| times the largest sample.
  const double most_v =
      amplitude_v_ * space.peak_limit() * model.states[ctle_index].victim.samples_v().cwiseAbs().maxCoeff();
  for (const DfeTap& tap : link.device.receiver.dfe) {
    Knob knob;
    knob.hi = tap.relative ? limit_v(tap, most_v) : limit_v(tap, 1.0);
    knob.lo = -knob.hi;
    knob.inner = settles_ || (tap.relative && !tap.codes.empty());
    if (!tap.codes.empty()) {
      if (knob.inner) {
        is_concave_ = false;
        is_all_ = is_all_ && settles_;
      } else {
        for (const Code& code : tap.codes) knob.values.push_back(code.value);
        knob.lo = knob.values.front();
        knob.hi = knob.values.back();
      }
    }
    knobs_.push_back(std::move(knob));
  }
}

void ObjectiveCell::move_to(Eigen::Index phase_samples) {
  place_.phase_samples = phase_samples;
  row_ = victim_row(*model_, place_.ctle_index, phase_samples);
  objective_ = {};  // made when first asked for: most cells fall to the quick bound
}

void ObjectiveCell::expand(std::span<const double> x) {
  if (!objective_.value_v) objective_ = objective_at(*model_, model_->link.objective, place_);
  space_->expand(x, taps_);
  const auto num_taps = static_cast<Eigen::Index>(taps_.size());
  point_.resize(num_taps + objective_.num_dfe);
  point_.head(num_taps) = Eigen::Map<const Eigen::VectorXd>(taps_.data(), num_taps);
  for (Eigen::Index i = 0; i < objective_.num_dfe; ++i) {
    point_[num_taps + i] = x[at(space_->num_free() + i)];
  }
}

double ObjectiveCell::main_cursor_v() const {
  double main = 0.0;
  for (std::size_t i = 0; i < taps_.size(); ++i) main += taps_[i] * row_.at(-space_->positions()[i]);
  return amplitude_v_ * main;
}

void ObjectiveCell::add_rows(const Box& box, CuttingPlanes& planes) {
  space_->add_rows(box, planes);
  const DfeLimits& dfe = model_->link.device.receiver.dfe;
  for (std::size_t i = 0; i < dfe.size(); ++i) {
    if (!dfe[i].relative) continue;
    // |d| <= limit q_0(c)
    const double limit = limit_v(dfe[i], 1.0) * amplitude_v_;
    for (std::size_t t = 0; t < taps_.size(); ++t) {
      by_taps_[t] = -limit * row_.at(-space_->positions()[t]);
    }
    std::vector<double> g(knobs_.size(), 0.0);
    const double constant = space_->reduce(box, by_taps_, g);
    for (const double sign : {1.0, -1.0}) {
      g[at(space_->num_free()) + i] = sign;
      planes.add_row(g, -constant);
    }
  }
}

double ObjectiveCell::cut(const Box& box, std::span<const double> x, std::span<double> a) {
  expand(x);
  const double value = objective_.upper_bound_v(point_, &gradient_);
  for (std::size_t i = 0; i < taps_.size(); ++i) by_taps_[i] = gradient_[static_cast<Eigen::Index>(i)];
  double constant = value - gradient_.dot(point_);
  constant += space_->reduce(box, by_taps_, a);
  for (Eigen::Index i = 0; i < objective_.num_dfe; ++i) {
    a[at(space_->num_free() + i)] = gradient_[static_cast<Eigen::Index>(taps_.size()) + i];
  }
  return constant;
}

bool ObjectiveCell::separate(const Box& box, std::span<const double> x, CuttingPlanes& planes,
                             bool thorough) {
  if (space_->separate(x, planes)) return true;
  if (!thorough || input_ == nullptr) return false;
  space_->expand(x, taps_);
  const double limit = *model_->link.device.receiver.peak_input_v / amplitude_v_;
  if (input_->peak(taps_, by_taps_) <= limit * (1.0 + 1e-13) + kRounding) return false;
  std::vector<double> g(knobs_.size(), 0.0);
  const double constant = space_->reduce(box, by_taps_, g);
  planes.add_row(g, limit - constant);
  return true;
}

Eigen::VectorXd ObjectiveCell::chosen(std::span<const double> x) {
  Settings now;
  now.swing_index = place_.swing_index;
  now.ctle_index = place_.ctle_index;
  now.phase_samples = place_.phase_samples;
  now.fir = point_.head(static_cast<Eigen::Index>(taps_.size()));
  Eigen::VectorXd trial = point_;
  if (objective_.num_dfe == 0) return trial;
  if (!is_all_) {
    trial.tail(objective_.num_dfe) = best_dfe(*model_, now);
    return trial;
  }
  trial.tail(objective_.num_dfe) = settled_dfe(*model_, now);
  if (settles_) return trial;
  // What came with x may be better than what adaptation finds, or be of other taps.
  Eigen::VectorXd given = point_;
  const DfeLimits& dfe = model_->link.device.receiver.dfe;
  for (std::size_t i = 0; i < dfe.size(); ++i) {
    double& value = given[static_cast<Eigen::Index>(taps_.size() + i)];
    value = settled_v(dfe[i], x[at(space_->num_free()) + i], main_cursor_v());
  }
  return objective_.value_v(given, nullptr) >= objective_.value_v(trial, nullptr) ? given : trial;
}

double ObjectiveCell::exact(std::span<const double> x, double worth) {
  expand(x);
  if (!space_->allowed(taps_) || !(main_cursor_v() > 0.0)) return kImpossible;
  if (input_ != nullptr &&
      input_->peak(taps_, by_taps_) * amplitude_v_ >
          *model_->link.device.receiver.peak_input_v * (1.0 + 1e-12)) {
    return kImpossible;
  }
  const double height = objective_.value_v(chosen(x), nullptr);
  if (model_->link.sampling != SamplingRule::kBest && height >= worth) {
    const SamplingInstant instant =
        sampling_instant(*model_, settings(x), model_->link.sampling);
    if (instant.rule_held && instant.phase_samples != place_.phase_samples) return kImpossible;
  }
  return height;
}

double ObjectiveCell::signal(std::span<const double> x) {
  expand(x);
  return main_cursor_v();
}

Settings ObjectiveCell::settings(std::span<const double> x) {
  expand(x);
  const Eigen::VectorXd all = chosen(x);
  Settings settings;
  settings.swing_index = place_.swing_index;
  settings.ctle_index = place_.ctle_index;
  settings.phase_samples = place_.phase_samples;
  settings.fir = all.head(static_cast<Eigen::Index>(taps_.size()));
  settings.dfe_v = all.tail(objective_.num_dfe);
  return settings;
}

double ObjectiveCell::quick_bound() const {
  double largest = 0.0;
  for (const int position : space_->positions()) {
    largest = std::max(largest, std::abs(row_.at(-position)));
  }
  return 2.0 * (amplitude_v_ * signal_share(model_->link.signal) * space_->peak_limit() * largest -
                model_->link.device.receiver.sensitivity_v);
}

}  // namespace tapwright::search

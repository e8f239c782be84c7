#include "search/worst_case_cell.hpp"

#include <algorithm>
#include <cmath>
#include <cstddef>
#include <utility>

#include "tapwright/base/normal.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/eye/sampling.hpp"

namespace tapwright::search {
namespace {

constexpr double kRounding = 1e-13;  // volts of half eye at 1 V launch: some 500 roundings

std::size_t at(Eigen::Index i) { return static_cast<std::size_t>(i); }

double dot(std::span<const double> a, std::span<const double> b) {
  double sum = 0.0;
  for (std::size_t i = 0; i < a.size(); ++i) sum += a[i] * b[i];
  return sum;
}

}  // namespace

std::vector<Eigen::Index> search_phases(const EyeModel& model) {
  if (model.link.sampling == SamplingRule::kBest) return candidate_phases(model);
  // A rule may lead farther from the peak than anyone would go for the best.
  const Eigen::Index reach = 3 * model.input.samples_per_ui();
  std::vector<Eigen::Index> phases;
  for (Eigen::Index phase = -reach; phase <= reach; ++phase) phases.push_back(phase);
  return phases;
}

StateRows::StateRows(const PulseResponse& pulse)
    : per_ui_(pulse.samples_per_ui()),
      per_phase_((pulse.size() + per_ui_ - 1) / per_ui_),
      size_(pulse.size()),
      samples_(at(per_ui_ * per_phase_), 0.0) {
  const double* from = pulse.samples_v().data();
  constexpr Eigen::Index kBlock = 8;  // UI at a time, so that lines of both sides stay in the cache
  for (Eigen::Index first = 0; first < per_phase_; first += kBlock) {
    const Eigen::Index last = std::min(first + kBlock, per_phase_);
    const bool whole = last * per_ui_ <= size_;
    for (Eigen::Index phase = 0; phase < per_ui_; ++phase) {
      double* to = samples_.data() + phase * per_phase_;
      if (whole) {
        for (Eigen::Index ui = first; ui < last; ++ui) to[ui] = from[ui * per_ui_ + phase];
      } else {
        for (Eigen::Index ui = first; ui < last; ++ui) {
          const Eigen::Index i = ui * per_ui_ + phase;
          if (i < size_) to[ui] = from[i];
        }
      }
    }
  }
}

void StateRows::copy(Eigen::Index sample_index, int num_pre, int num_post, double* to) const {
  Eigen::Index phase = sample_index % per_ui_;
  if (phase < 0) phase += per_ui_;
  const Eigen::Index first = (sample_index - phase) / per_ui_ - num_pre;
  const Eigen::Index count = num_pre + num_post + 1;
  const double* from = samples_.data() + phase * per_phase_;
  const Eigen::Index begin = std::clamp<Eigen::Index>(-first, 0, count);
  const Eigen::Index end = std::clamp<Eigen::Index>(per_phase_ - first, begin, count);
  std::fill(to, to + begin, 0.0);
  std::copy(from + first + begin, from + first + end, to + begin);
  std::fill(to + end, to + count, 0.0);
}

bool WorstCaseState::covers(const EyeModel& model) {
  const Link& link = model.link;
  return link.signal.line_code.kind == LineCodeKind::kNone && link.mask_width_ui == 0.0 &&
         link.jitter.common_random_ui == 0.0;
}

WorstCaseState::WorstCaseState(const EyeModel& model, const FirSpace& space,
                               const InputLimit* input, std::shared_ptr<const StateRows> rows,
                               std::size_t swing_index, std::size_t ctle_index)
    : model_(&model), space_(&space), input_(input), rows_(std::move(rows)) {
  const Link& link = model.link;
  const Device& device = link.device;
  const double amplitude_v = device.transmitter.swings[swing_index].value;
  peak_index_ = model.states[ctle_index].peak_index();
  eye_.model = &model;
  eye_.place = {swing_index, ctle_index, 0};
  eye_.amplitude_v = amplitude_v;
  share_ = signal_share(link.signal);
  scale_ = 2.0 * amplitude_v;
  for (const DfeTap& tap : device.receiver.dfe) {
    Dfe dfe{tap.position, tap.relative, limit_v(tap, 1.0), {}};
    for (const Code& code : tap.codes) dfe.values.push_back(code.value);
    if (!tap.relative) {
      dfe.limit /= amplitude_v;
      for (double& value : dfe.values) value /= amplitude_v;
    }
    dfe_has_codes_ = dfe_has_codes_ || !dfe.values.empty();
    dfe_.push_back(std::move(dfe));
  }
  noise_v_ = model.states[ctle_index].noise_v / amplitude_v;
  if (device.transmitter.snr_db) {
    transmitter_ratio_ = 1.0 / amplitude_db_to_ratio(*device.transmitter.snr_db);
  }
  quantile_ = gaussian_quantile_of_tail(link.target.error_ratio);
  if (model.input.samples_per_ui() >= kLeastSamplesPerUi) {
    dual_dirac_ui_ = link.jitter.dual_dirac_peak_ui;
    random_factor_ = link.jitter.random_ui * std::sqrt(symbol_variance(link.signal.levels));
  }
  sensitivity_v_ = device.receiver.sensitivity_v / amplitude_v;
  rule_ = link.sampling;
  has_crosstalk_ = !link.crosstalk.empty();
  if (device.receiver.peak_input_v) input_limit_v_ = *device.receiver.peak_input_v / amplitude_v;
  const bool can_bind = device.receiver.peak_input_v && input != nullptr &&
                        space.peak_limit() * input->flat_peak() > input_limit_v_;
  if (!can_bind) input_ = nullptr;
}

WorstCaseCell::WorstCaseCell(const WorstCaseState& state)
    : state_(&state),
      taps_(at(state.space_->num_taps())),
      by_taps_(taps_.size()),
      sums_(taps_.size()) {}

void WorstCaseCell::move_to(Eigen::Index phase_samples) {
  phase_samples_ = phase_samples;
  const EyeModel& model = *state_->model_;
  const std::vector<int>& positions = state_->space_->positions();
  const int first = std::min(0, positions.front());
  const int last = std::max(0, positions.back());
  const int pre = model.span_ui[0];
  const int post = model.span_ui[1];
  const int count = (pre + post + 1 + last - first + 3) / 4 * 4;
  const Eigen::Index sample = state_->peak_index_ + phase_samples;
  // Entry `last` of the buffer is output cursor -pre + first; cursor -pre of the pulse stands at
  // last - first.
  buffer_.resize(at(last - first + count));  // zeros; the window below is always the same
  state_->rows_->copy(sample, pre, post, buffer_.data() + last - first);
  row_ = {buffer_.data() + last, -pre + first, count};
  if (state_->dual_dirac_ui_ == 0.0 && state_->random_factor_ == 0.0) return;

  jitter_buffer_.assign(buffer_.size(), 0.0);
  std::vector<double> before(buffer_.size(), 0.0);
  state_->rows_->copy(sample + 1, pre, post, jitter_buffer_.data() + last - first);
  state_->rows_->copy(sample - 1, pre, post, before.data() + last - first);
  const double half_ui = model.input.samples_per_ui() / 2.0;
  for (std::size_t i = 0; i < before.size(); ++i) {
    jitter_buffer_[i] = (jitter_buffer_[i] - before[i]) * half_ui;
  }
  jitter_row_ = {jitter_buffer_.data() + last, row_.first_k, row_.count};
  const auto n = static_cast<Eigen::Index>(positions.size());
  jitter_gram_.resize(n, n);
  for (Eigen::Index i = 0; i < n; ++i) {
    for (Eigen::Index j = 0; j <= i; ++j) {
      double sum = 0.0;
      for (int k = 0; k < count; ++k) {
        sum += jitter_row_.data[k - positions[at(i)]] * jitter_row_.data[k - positions[at(j)]];
      }
      jitter_gram_(i, j) = jitter_gram_(j, i) = sum;
    }
  }
}

double WorstCaseCell::tap_product(const PaddedRow& row, int k) const {
  if (k < row.first_k || k >= row.first_k + row.count) return 0.0;
  const std::vector<int>& positions = state_->space_->positions();
  double q = 0.0;
  for (std::size_t i = 0; i < taps_.size(); ++i) q += taps_[i] * row.at(k, positions[i]);
  return q;
}

double WorstCaseCell::noise(double main, std::span<double> slopes) {
  const double ratio = state_->transmitter_ratio_;
  const double factor = state_->random_factor_;
  if (ratio == 0.0 && factor == 0.0) return state_->quantile_ * state_->noise_v_;
  const auto n = static_cast<Eigen::Index>(taps_.size());
  const Eigen::Map<const Eigen::VectorXd> taps(taps_.data(), n);
  const Eigen::VectorXd jitter = factor == 0.0 ? Eigen::VectorXd::Zero(n)
                                               : Eigen::VectorXd(factor * factor * jitter_gram_ * taps);
  const double sigma = std::sqrt(state_->noise_v_ * state_->noise_v_ +
                                 ratio * main * ratio * main + std::max(0.0, taps.dot(jitter)));
  const std::vector<int>& positions = state_->space_->positions();
  for (Eigen::Index i = 0; sigma > 0.0 && i < n; ++i) {
    slopes[at(i)] -= state_->quantile_ *
                     (ratio * ratio * main * row_.at(0, positions[at(i)]) + jitter[i]) / sigma;
  }
  return state_->quantile_ * sigma;
}

double WorstCaseCell::victim(std::span<double> slopes) {
  const std::vector<int>& positions = state_->space_->positions();
  const std::size_t n = taps_.size();
  sign_sums(row_, taps_, positions, slopes);
  double half = -dot(taps_, slopes);
  const double main = tap_product(row_, 0);
  half += std::abs(main) + state_->share_ * main;
  const double by_main = state_->share_ + (main < 0.0 ? -1.0 : 1.0);
  for (std::size_t i = 0; i < n; ++i) {
    slopes[i] = by_main * row_.at(0, positions[i]) - slopes[i];
  }
  for (const WorstCaseState::Dfe& dfe : state_->dfe_) {
    const double q = tap_product(row_, dfe.position);
    const double limit = dfe.relative ? dfe.limit * main : dfe.limit;
    if (std::abs(q) > limit) {
      half += limit;
      for (std::size_t i = 0; dfe.relative && i < n; ++i) {
        slopes[i] += dfe.limit * row_.at(0, positions[i]);
      }
    } else {
      half += std::abs(q);
      for (std::size_t i = 0; i < n; ++i) {
        slopes[i] += q < 0.0 ? -row_.at(dfe.position, positions[i])
                             : row_.at(dfe.position, positions[i]);
      }
    }
  }
  if (state_->dual_dirac_ui_ > 0.0) {
    sign_sums(jitter_row_, taps_, positions, sums_);
    half -= state_->dual_dirac_ui_ * dot(taps_, sums_);
    for (std::size_t i = 0; i < n; ++i) slopes[i] -= state_->dual_dirac_ui_ * sums_[i];
  }
  return half - noise(main, slopes) - state_->sensitivity_v_;
}

double WorstCaseCell::code_loss() {
  const double main = tap_product(row_, 0);
  double loss = 0.0;
  for (const WorstCaseState::Dfe& dfe : state_->dfe_) {
    if (dfe.values.empty()) continue;
    const double unit = dfe.relative ? main : 1.0;
    const double q = tap_product(row_, dfe.position);
    const auto above =
        std::lower_bound(dfe.values.begin(), dfe.values.end(), q, [&](double value, double wanted) {
          return value * unit < wanted;
        });
    double residual = std::numeric_limits<double>::infinity();
    if (above != dfe.values.end()) residual = std::abs(q - *above * unit);
    if (above != dfe.values.begin()) residual = std::min(residual, std::abs(q - above[-1] * unit));
    loss += residual - std::max(0.0, std::abs(q) - dfe.limit * unit);
  }
  return loss;
}

double WorstCaseCell::cut(const Box& box, std::span<const double> x, std::span<double> a) {
  const FirSpace& space = *state_->space_;
  space.expand(x, taps_);
  const double half = victim(by_taps_);
  double constant = half - dot(taps_, by_taps_);
  crosstalk_in_use_ = crosstalk_cuts_.size();
  double most = 0.0;
  for (std::size_t i = 0; i < crosstalk_cuts_.size(); ++i) {
    const double value = crosstalk_cuts_[i].constant + dot(crosstalk_cuts_[i].slopes, taps_);
    if (value > most) {
      most = value;
      crosstalk_in_use_ = i;
    }
  }
  if (crosstalk_in_use_ < crosstalk_cuts_.size()) {
    const CrosstalkCut& worst = crosstalk_cuts_[crosstalk_in_use_];
    constant -= worst.constant;
    for (std::size_t i = 0; i < taps_.size(); ++i) by_taps_[i] -= worst.slopes[i];
  }
  constant += space.reduce(box, by_taps_, a);
  for (int i = 0; i < space.num_free(); ++i) a[at(i)] *= state_->scale_;
  return state_->scale_ * constant;
}

std::vector<double> WorstCaseCell::side_point() const {
  if (crosstalk_in_use_ >= crosstalk_cuts_.size()) return {};
  return crosstalk_cuts_[crosstalk_in_use_].taps;
}

bool WorstCaseCell::separate(const Box& box, std::span<const double> x, CuttingPlanes& planes,
                             bool thorough) {
  const FirSpace& space = *state_->space_;
  if (space.separate(x, planes)) return true;
  if (!thorough || (state_->input_ == nullptr && !state_->has_crosstalk_)) return false;
  space.expand(x, taps_);
  if (state_->input_ != nullptr) {
    const double peak = state_->input_->peak(taps_, by_taps_);
    if (peak > state_->input_limit_v_ * (1.0 + 1e-13) + kRounding) {
      std::vector<double> g(at(space.num_free()));
      const double constant = space.reduce(box, by_taps_, g);
      planes.add_row(g, state_->input_limit_v_ - constant);
      return true;
    }
  }
  if (state_->has_crosstalk_) {
    const Eigen::Map<const Eigen::VectorXd> taps(taps_.data(),
                                                 static_cast<Eigen::Index>(taps_.size()));
    const CrosstalkPeak peak = crosstalk_peak(state_->eye_, taps);
    const double amplitude_v = state_->eye_.amplitude_v;
    CrosstalkCut fresh{{}, (peak.worst_v - peak.supergradient.dot(taps)) / amplitude_v, taps_};
    for (const double slope : peak.supergradient) fresh.slopes.push_back(slope / amplitude_v);
    double known = 0.0;
    for (const CrosstalkCut& old : crosstalk_cuts_) {
      known = std::max(known, old.constant + dot(old.slopes, taps_));
    }
    if (peak.worst_v / amplitude_v > known + kRounding) {
      crosstalk_cuts_.push_back(std::move(fresh));
      return true;
    }
  }
  return false;
}

double WorstCaseCell::exact(std::span<const double> x, double worth) {
  state_->space_->expand(x, taps_);
  if (!state_->space_->allowed(taps_)) return kImpossible;
  if (!(tap_product(row_, 0) > 0.0)) return kImpossible;
  double half = victim(by_taps_);
  if (state_->dfe_has_codes_) half -= code_loss();
  if (state_->scale_ * half < worth) return state_->scale_ * half;
  if (state_->has_crosstalk_) {
    const Eigen::Map<const Eigen::VectorXd> taps(taps_.data(),
                                                 static_cast<Eigen::Index>(taps_.size()));
    half -= crosstalk_peak(state_->eye_, taps).worst_v / state_->eye_.amplitude_v;
  }
  if (state_->input_ != nullptr &&
      state_->input_->peak(taps_, by_taps_) > state_->input_limit_v_ * (1.0 + 1e-12) + kRounding) {
    return kImpossible;
  }
  // The sampling rule places this setting somewhere else: its worth is that cell's business.
  if (state_->rule_ != SamplingRule::kBest && state_->scale_ * half >= worth) {
    const SamplingInstant instant = sampling_instant(*state_->model_, settings(x), state_->rule_);
    if (instant.rule_held && instant.phase_samples != phase_samples_) return kImpossible;
  }
  return state_->scale_ * half;
}

double WorstCaseCell::signal(std::span<const double> x) {
  state_->space_->expand(x, taps_);
  return state_->eye_.amplitude_v * tap_product(row_, 0);
}

Place WorstCaseCell::place() const {
  Place place = state_->eye_.place;
  place.phase_samples = phase_samples_;
  return place;
}

Settings WorstCaseCell::settings(std::span<const double> x) {
  state_->space_->expand(x, taps_);
  Settings settings;
  settings.swing_index = state_->eye_.place.swing_index;
  settings.ctle_index = state_->eye_.place.ctle_index;
  settings.phase_samples = phase_samples_;
  settings.fir = Eigen::Map<const Eigen::VectorXd>(taps_.data(),
                                                   static_cast<Eigen::Index>(taps_.size()));
  const std::vector<DfeTap>& limits = state_->model_->link.device.receiver.dfe;
  settings.dfe_v.resize(static_cast<Eigen::Index>(limits.size()));
  const double amplitude_v = state_->eye_.amplitude_v;
  for (std::size_t i = 0; i < limits.size(); ++i) {
    settings.dfe_v[static_cast<Eigen::Index>(i)] =
        settled_v(limits[i], amplitude_v * tap_product(row_, limits[i].position),
                  amplitude_v * tap_product(row_, 0));
  }
  return settings;
}

bool WorstCaseCell::has_sign_bound() const {
  return state_->dual_dirac_ui_ == 0.0 && state_->random_factor_ == 0.0 &&
         state_->transmitter_ratio_ == 0.0;
}

void WorstCaseCell::take_signs(const Multipliers& from, Signs& signs) {
  signs.values.assign(at(row_.count), 0.0);
  for (std::size_t j = 0; j < from.points.size(); ++j) {
    state_->space_->expand(from.points[j], taps_);
    const double weight = from.weights[j];
    for (int k = 0; k < row_.count; ++k) {
      signs.values[at(k)] += tap_product(row_, row_.first_k + k) < 0.0 ? -weight : weight;
    }
    for (const WorstCaseState::Dfe& dfe : state_->dfe_) {
      const int k = dfe.position - row_.first_k;
      if (k < 0 || k >= row_.count) continue;
      const double q = tap_product(row_, dfe.position);
      const double limit = dfe.relative ? dfe.limit * tap_product(row_, 0) : dfe.limit;
      if (std::abs(q) <= limit) signs.values[at(k)] -= q < 0.0 ? -weight : weight;
    }
  }
  for (double& value : signs.values) value = std::clamp(value, -1.0, 1.0);
  signs.values[at(-row_.first_k)] = 0.0;
}

double WorstCaseCell::sign_bound(const Box& box, const Signs& signs, std::span<double> a) {
  const std::vector<int>& positions = state_->space_->positions();
  weighted_sums(row_, signs.values, positions, by_taps_);
  double constant = -state_->quantile_ * state_->noise_v_ - state_->sensitivity_v_;
  double by_main = state_->share_;
  for (const WorstCaseState::Dfe& dfe : state_->dfe_) {
    const int k = dfe.position - row_.first_k;
    if (k < 0 || k >= row_.count) continue;
    const double worth = dfe.limit * std::abs(signs.values[at(k)]);
    if (dfe.relative) {
      by_main += worth;
    } else {
      constant += worth;
    }
  }
  for (std::size_t i = 0; i < by_taps_.size(); ++i) {
    by_taps_[i] = by_main * row_.at(0, positions[i]) - by_taps_[i];
  }
  constant += state_->space_->reduce(box, by_taps_, a);
  const double largest = state_->space_->largest(box, a, constant);
  return state_->scale_ * largest;
}

double WorstCaseCell::quick_bound() const {
  double largest = 0.0;
  for (const int position : state_->space_->positions()) {
    largest = std::max(largest, std::abs(row_.at(0, position)));
  }
  return state_->scale_ * (state_->share_ * state_->space_->peak_limit() * largest - state_->sensitivity_v_ -
                           state_->quantile_ * state_->noise_v_);
}

}  // namespace tapwright::search
